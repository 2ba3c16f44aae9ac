"""Errors in both coordinates: effective variance to choose with, orthogonal distance regression for the curve chosen.

The effective variance u_y^2 + p'(x)^2 u_x^2 (Orear, Am. J. Phys. 50 (1982) 912) keeps every fit linear, so that all
degrees can be compared. The curve of the chosen degree is then the one of orthogonal distance regression, which moves
every point along x as well: it makes the sum of ((y - p(X))/u_y)^2 and ((X - x)/u_x)^2 least over p and the adjusted
X (Boggs, Byrd & Schnabel, SIAM J. Sci. Stat. Comput. 8 (1987) 1052; computed by ODRPACK: Zwolak, Boggs & Watson, ACM
Trans. Math. Softw. 33 (2007) 27). At its solution the coefficients, the sum of squares and the covariance are those of
a linear fit: at X, to y - p'(X)(x - X), with the effective variance at X. So diagnostics and bounds still see nested
fits.
"""

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import chebyshev
from odrpack import odr_fit

from service.core.basis import basis, to_chebyshev
from service.core.curve import derivative
from service.core.nested import Design, NestedFits
from service.core.observations import Floats, Observations
from service.errors import InvalidInput

ITERATIONS = 200
PASSES = 2  # the linear fit after the first is good to some 10 digits, and takes the second from there
DIGITS = 9  # of the coefficients, to which it settles
TOLERANCE = 1e-15  # of the sum of squares and of the coefficients


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Regressed:
    """Nested fits whose fit of one degree is the orthogonal distance regression; or, not `settled`, those given."""

    fits: NestedFits
    settled: bool


def regress(observations: Observations, fits: NestedFits, degree: int) -> Regressed:
    """The orthogonal distance regression of one degree, from its fit in `fits` on."""
    x, y = observations.x, observations.y
    found = fits
    for _ in range(PASSES):
        delta, slope = _adjust(observations, found, degree)
        if delta is None or slope is None:
            return Regressed(fits=fits, settled=False)
        design = Design.of(x + delta, y + slope * delta, top=fits.top, intercept=fits.intercept, domain=fits.domain)
        found = design.fit(effective_weights(observations, slope))
        if found.top < fits.top:
            return Regressed(fits=fits, settled=False)
    return Regressed(fits=found, settled=True)


def effective_weights(observations: Observations, slope: Floats) -> Floats:
    """1/(u_y^2 + slope^2 u_x^2). Raises InvalidInput at /dataset/u_x where that has no value."""
    assert observations.u_x is not None
    assert observations.u_y is not None
    with np.errstate(over="ignore"):
        variance = observations.u_y**2 + (slope * observations.u_x) ** 2
    if not np.isfinite(variance).all():
        raise InvalidInput.at("/dataset/u_x", "is too large: it swamps the whole range of the readings")
    return np.asarray(1.0 / variance)


def slope_at(fits: NestedFits, degree: int, x: Floats) -> Floats:
    """dp/dx of one fit at x."""
    lo, hi = fits.domain
    slope = derivative(fits.chebyshev(degree)) * (2.0 / (hi - lo))
    return np.asarray(chebyshev.chebval(((x - lo) + (x - hi)) / (hi - lo), slope))


def _adjust(observations: Observations, fits: NestedFits, degree: int) -> tuple[Floats | None, Floats | None]:
    """How far each x moves, and the slope of the curve there; None where the regression does not settle."""
    assert observations.u_x is not None
    assert observations.u_y is not None
    x, y, u_x, u_y = observations.x, observations.y, observations.u_x, observations.u_y
    columns = fits.columns(degree)
    if degree == 0 or columns == 0:
        return np.zeros_like(x), np.zeros_like(x)
    lo, hi = fits.domain
    half = (hi - lo) / 2
    to_series = np.eye(columns) if fits.intercept else to_chebyshev(fits.domain, columns)
    start = fits.r_inverse[:columns, :columns] @ fits.qty[:columns]
    # in units of half the range of x and of the size of y, and with weights about 1, so that nothing overflows
    size = float(np.abs(y).max()) or 1.0
    common = float(np.median(u_y / size))

    def columns_at(t: Floats) -> Floats:
        return basis(lo + half * (t + 1), fits.domain, degree, fits.intercept)

    def slopes(t: Floats, b: Floats) -> Floats:
        return np.asarray(chebyshev.chebval(t, derivative(to_series @ b)))

    found = odr_fit(
        lambda t, b: columns_at(t) @ b,
        ((x - lo) + (x - hi)) / (hi - lo),
        y / size,
        start / size,
        weight_x=(common / (u_x / half)) ** 2,
        weight_y=(common / (u_y / size)) ** 2,
        jac_beta=lambda t, _: columns_at(t).T,
        jac_x=slopes,
        maxit=ITERATIONS,
        sstol=TOLERANCE,
        partol=TOLERANCE,
    )
    if not found.success or not np.isfinite(found.delta).all() or not np.isfinite(found.beta).all():
        return None, None
    t = ((x - lo) + (x - hi)) / (hi - lo) + found.delta
    return half * found.delta, slopes(t, found.beta) * (size / half)
