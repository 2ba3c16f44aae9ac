"""Errors in both coordinates: orthogonal distance regression, carried into the nested linear fits.

Orthogonal distance regression moves every point along x as well: it makes the sum of ((y - p(X))/u_y)^2 and
((X - x)/u_x)^2 least over the curve p and the adjusted X (Boggs, Byrd & Schnabel, SIAM J. Sci. Stat. Comput. 8 (1987)
1052; computed by ODRPACK, Zwolak, Boggs & Watson, ACM Trans. Math. Softw. 33 (2007) 27). At its solution the
coefficients, the sum of squares and the covariance are those of a linear fit: at X, to y - p'(X)(x - X), with the
effective variance u_y^2 + p'(X)^2 u_x^2 (Orear, Am. J. Phys. 50 (1982) 912). So one nested QR serves every degree here
too; only the degree that X was adjusted for is the exact solution, the others share its X and weights.
"""

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import chebyshev
from odrpack import odr_fit

from service.core.basis import basis, to_chebyshev
from service.core.curve import derivative
from service.core.nested import NestedFits
from service.core.observations import Floats, Observations
from service.errors import InvalidInput

ITERATIONS = 200
DIGITS = 9  # of the coefficients, to which it settles
TOLERANCE = 1e-15  # of the sum of squares and of the coefficients


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Adjusted:
    """A linear problem with the solution of the orthogonal distance regression of one degree.

    x, y, weights: (n,). settled: whether the regression converged; if not, x and y are as observed, with the
    effective variance at the curve given.
    """

    x: Floats
    y: Floats
    weights: Floats
    settled: bool


def adjust(observations: Observations, fits: NestedFits, degree: int) -> Adjusted:
    """Adjust x for the curve of one degree, starting from its fit in `fits`. Raises InvalidInput at /dataset/u_x."""
    assert observations.u_x is not None
    assert observations.u_y is not None
    x, y, u_x, u_y = observations.x, observations.y, observations.u_x, observations.u_y
    lo, hi = fits.domain
    half = (hi - lo) / 2
    columns = fits.columns(degree)
    to_series = np.eye(columns) if fits.intercept else to_chebyshev(fits.domain, columns)
    start = fits.r_inverse[:columns, :columns] @ fits.qty[:columns]

    def slopes(t: Floats, coefficients: Floats) -> Floats:
        return np.asarray(chebyshev.chebval(t, derivative(to_series @ coefficients)))

    def effective(slope: Floats) -> Floats:
        with np.errstate(over="ignore"):
            variance = u_y**2 + (slope / half * u_x) ** 2
        if not np.isfinite(variance).all():
            raise InvalidInput.at("/dataset/u_x", "is too large: it swamps the whole range of the readings")
        return np.asarray(1.0 / variance)

    t = ((x - lo) + (x - hi)) / (hi - lo)
    if columns == 0 or degree == 0:
        return Adjusted(x=x, y=y, weights=effective(slopes(t, start)), settled=True)
    # in units of the range of x and of the size of y, and with weights about 1, so that nothing overflows
    size = float(np.abs(y).max()) or 1.0
    common = float(np.median(u_y / size))

    def at(moved: Floats) -> Floats:
        return basis(lo + half * (moved + 1), fits.domain, degree, fits.intercept)

    found = odr_fit(
        lambda moved, b: at(moved) @ b,
        t,
        y / size,
        start / size,
        weight_x=(common / (u_x / half)) ** 2,
        weight_y=(common / (u_y / size)) ** 2,
        jac_beta=lambda moved, _: at(moved).T,
        jac_x=lambda moved, b: slopes(moved, b),
        maxit=ITERATIONS,
        sstol=TOLERANCE,
        partol=TOLERANCE,
    )
    if not found.success or not np.isfinite(found.delta).all():
        return Adjusted(x=x, y=y, weights=effective(slopes(t, start)), settled=False)
    slope = slopes(t + found.delta, found.beta * size)
    return Adjusted(x=x + half * found.delta, y=y + slope * found.delta, weights=effective(slope), settled=True)
