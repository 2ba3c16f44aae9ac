"""The chosen curve: coefficients in both bases, their uncertainty, slope and monotonicity."""

import math
from dataclasses import replace
from fractions import Fraction
from functools import lru_cache

import numpy as np
from numpy.polynomial import Polynomial, chebyshev

from service.core.exact import ExactFit, exact_fit
from service.core.nested import EPS, NestedFits
from service.core.observations import Floats
from service.core.result import Curve, PowerBasis, Test
from service.core.tails import f_tail, t_two_sided, z_two_sided

DIGITS_OF_A_DOUBLE = 15
BEYOND_A_DOUBLE = "; null where no double can hold the value: use the Chebyshev coefficients"


def describe_curve(
    fits: NestedFits, degree: int, *, absolute: bool, digits: int = DIGITS_OF_A_DOUBLE
) -> tuple[Curve, ExactFit | None]:
    """The curve of one degree. With absolute weights (`known_uncertainty`) the variance is 1, not RSS/df.

    digits: how many x and weights are good for, where they were computed and not given.
    """
    exact = exact_fit(fits.x, fits.y, fits.weights, degree, intercept=fits.intercept, domain=fits.domain)
    coefficients = np.array(exact.chebyshev) if exact else fits.chebyshev(degree)
    df = fits.df(degree)
    rss = exact.rss if exact else float(fits.rss[degree])
    variance = rss / df if df > 0 else None
    if absolute:
        variance = 1.0
    covariance = None
    if variance is not None:
        covariance = tuple(tuple(row) for row in (fits.unscaled_covariance(degree) * variance).tolist())
    if exact:
        power = _exact_power(exact, rss, df, absolute)
        if absolute and rss == 0:  # no residual to scale back from: known uncertainty stands all the same
            doubles = _rounded_power(fits, degree, variance, df, absolute)
            power = replace(power, standard_errors=doubles.standard_errors, t=doubles.t, p=doubles.p)
    else:
        power = _rounded_power(fits, degree, variance, df, absolute)
    tss = fits.tss if fits.intercept else float(np.sum(fits.weights * fits.y**2))
    r2 = exact.r2 if exact else (1 - rss / tss if tss > fits.rounding_rss else None)
    curve = Curve(
        basis="chebyshev",
        domain=fits.domain,
        coefficients=tuple(coefficients.tolist()),
        covariance=covariance,
        power=power if power.digits <= digits else replace(power, digits=digits),
        residual_sd=math.sqrt(rss / df) if df > 0 else None,
        degrees_of_freedom=df,
        r2=r2,
        f=_overall(fits, degree, rss, tss, exact),
    )
    return curve, exact


def _overall(fits: NestedFits, degree: int, rss: float, tss: float, exact: ExactFit | None) -> Test:
    df = fits.df(degree)
    if degree == 0:
        return Test(f=None, df=(0, df), p=None, reason="degree 0 explains nothing")
    if rss <= fits.rounding_rss:
        if tss <= fits.rounding_rss:
            return Test(f=None, df=(degree, df), p=None, reason="y is constant")
        return Test(f=None, df=(degree, df), p=0.0, reason="the residuals are at the level of rounding")
    f = exact.f if exact and exact.f is not None else (tss - rss) / degree / (rss / df)
    return Test(f=f, df=(degree, df), p=float(f_tail(f, degree, df)))


def _exact_power(exact: ExactFit, rss: float, df: int, absolute: bool) -> PowerBasis:
    sd, t = exact.power_sd, exact.t
    if absolute and rss > 0:
        root = math.sqrt(rss / df)
        sd = tuple(None if v is None or not math.isfinite(v / root) else v / root for v in sd)
        t = tuple(None if v is None else v * root for v in t)
    representable = all(v is not None for v in exact.power)
    return PowerBasis(
        coefficients=exact.power,
        standard_errors=sd,
        t=t,
        p=tuple(None if v is None else float(z_two_sided(v) if absolute else t_two_sided(v, df)) for v in t),
        digits=DIGITS_OF_A_DOUBLE if representable else 0,
        method="exact integer arithmetic, each coefficient rounded once" + ("" if representable else BEYOND_A_DOUBLE),
    )


def _rounded_power(fits: NestedFits, degree: int, variance: float | None, df: int, absolute: bool) -> PowerBasis:
    """From the QR, converted without further rounding, with an estimate of the digits that are left."""
    matrix = _power_matrix(fits.domain, degree)
    c = [Fraction(v) for v in fits.chebyshev(degree).tolist()]
    exact_values = [sum((a * b for a, b in zip(row, c, strict=True)), Fraction(0)) for row in matrix]
    m = np.array([[_double(a) for a in row] for row in matrix])
    unit = fits.unscaled_covariance(degree)
    root_w_y = float(np.sqrt(np.sum(fits.weights * fits.y**2)))
    coefficients = [_double(v) for v in exact_values]
    with np.errstate(over="ignore", invalid="ignore"):
        error = np.abs(m) @ np.sqrt(np.diag(unit)) * (4 * EPS * root_w_y)
        se = np.sqrt(np.maximum(np.einsum("ij,jk,ik->i", m, unit, m), 0) * (variance or 0.0)).tolist()
    representable = all(
        math.isfinite(c) and (c != 0 or v == 0) for c, v in zip(coefficients, exact_values, strict=True)
    )
    digits = DIGITS_OF_A_DOUBLE if representable else 0
    for value, off in zip(coefficients, error.tolist(), strict=True):
        if representable and value != 0 and off > 0:
            digits = min(digits, math.floor(-math.log10(min(1.0, off / abs(value)))))
    usable = [0 < s < math.inf and math.isfinite(c) for c, s in zip(coefficients, se, strict=True)]
    t = [c / s if ok else None for c, s, ok in zip(coefficients, se, usable, strict=True)]
    return PowerBasis(
        coefficients=tuple(
            c if math.isfinite(c) and (c != 0 or v == 0) else None
            for c, v in zip(coefficients, exact_values, strict=True)
        ),
        standard_errors=tuple(s if ok else None for s, ok in zip(se, usable, strict=True)),
        t=tuple(t),
        p=tuple(None if v is None else float(z_two_sided(v) if absolute else t_two_sided(v, df)) for v in t),
        digits=digits,
        method="Chebyshev QR, converted exactly; digits estimated from its error bound"
        + ("" if representable else BEYOND_A_DOUBLE),
    )


def _double(value: Fraction) -> float:
    """The nearest double; infinite where there is none."""
    try:
        return float(value)
    except OverflowError:
        return math.inf if value > 0 else -math.inf


def _power_matrix(domain: tuple[float, float], degree: int) -> list[list[Fraction]]:
    """Row k: the coefficient of x^k in each T_j(t)."""
    lo, hi = Fraction(domain[0]), Fraction(domain[1])
    a, b = -(lo + hi) / (hi - lo), Fraction(2) / (hi - lo)  # t = a + b x
    polys: list[list[Fraction]] = [[Fraction(1)], [a, b]]
    for _ in range(2, degree + 1):
        last, before = polys[-1], polys[-2]
        new = [Fraction(0)] * (len(last) + 1)
        for k, v in enumerate(last):
            new[k] += 2 * a * v
            new[k + 1] += 2 * b * v
        for k, v in enumerate(before):
            new[k] -= v
        polys.append(new)
    return [[p[k] if k < len(p) else Fraction(0) for p in polys[: degree + 1]] for k in range(degree + 1)]


def to_t(x: Floats | float, domain: tuple[float, float]) -> Floats:
    """t in [-1, 1] over the domain."""
    lo, hi = domain
    return np.asarray(((x - lo) + (x - hi)) / (hi - lo))


def value_at(coefficients: Floats, domain: tuple[float, float], x: Floats | float) -> Floats:
    """The curve at x."""
    return np.asarray(chebyshev.chebval(to_t(x, domain), coefficients))


def slope_range(
    coefficients: Floats, domain: tuple[float, float], working_range: tuple[float, float]
) -> tuple[float, float, float]:
    """Least and greatest slope dy/dx over the working range, and the x where the curve turns or else is flattest.

    The extremes of p' lie at the ends or at real roots of p''; the roots are found, not sampled.
    """
    lo, hi = domain
    first = derivative(coefficients) * (2 / (hi - lo))
    ends = to_t(np.array(working_range), domain)
    places = [float(ends[0]), float(ends[1])]
    second = derivative(first)
    while second.size > 1 and second[-1] == 0:
        second = second[:-1]
    if second.size > 1:
        places += _real_roots(second, ends)
    slopes = chebyshev.chebval(np.array(places), first)
    place = places[int(np.argmin(np.abs(slopes)))]
    if slopes.min() < 0 < slopes.max():
        place = min(_real_roots(first, ends), key=abs, default=place)
    at = (lo + hi) / 2 + place * (hi - lo) / 2
    return float(slopes.min()), float(slopes.max()), at


def _real_roots(coefficients: Floats, ends: Floats) -> list[float]:
    """Roots strictly within `ends`, on t."""
    roots = chebyshev.chebroots(coefficients)
    real = roots[np.abs(roots.imag) < 1e-7 * (1 + np.abs(roots.real))].real
    return [float(r) for r in real if ends[0] < r < ends[1]]


def is_monotonic(coefficients: Floats, domain: tuple[float, float], working_range: tuple[float, float]) -> bool:
    """Strictly monotonic: the slope keeps one sign, zero excluded up to rounding."""
    return which_monotonic(coefficients[:, None], domain, working_range)[0]


def which_monotonic(
    coefficients: Floats, domain: tuple[float, float], working_range: tuple[float, float]
) -> list[bool]:
    """`is_monotonic` for many curves, one a column of coefficients on T_0..T_top."""
    if working_range != domain:
        return [_one_sign(*slope_range(c, domain, working_range)[:2]) for c in coefficients.T]
    # the slope lies within its Bernstein coefficients, the first and last of which are its values at the ends
    bounds = _slope_bernstein(coefficients.shape[0] - 1) @ coefficients
    out: list[bool] = []
    for c, ends, least, greatest in zip(
        coefficients.T,
        bounds[[0, -1]].T.tolist(),
        bounds.min(axis=0).tolist(),
        bounds.max(axis=0).tolist(),
        strict=True,
    ):
        if _one_sign(least, greatest):
            out.append(True)
        elif not _one_sign(min(ends), max(ends)):
            out.append(False)
        else:
            out.append(_one_sign(*slope_range(c, domain, working_range)[:2]))
    return out


def _one_sign(least: float, greatest: float) -> bool:
    tiny = 1e-13 * max(abs(least), abs(greatest))
    return least > tiny or greatest < -tiny


def derivative(coefficients: Floats) -> Floats:
    """Coefficients on T_j of the derivative by t; [0] for a constant."""
    return np.asarray(_derivative_matrix(coefficients.size - 1) @ coefficients)


@lru_cache(maxsize=32)
def _derivative_matrix(degree: int) -> Floats:
    if degree == 0:
        return np.zeros((1, 1))
    return np.asarray(chebyshev.chebder(np.eye(degree + 1)))


@lru_cache(maxsize=32)
def _slope_bernstein(degree: int) -> Floats:
    """From coefficients on T_0..T_degree to Bernstein coefficients of the derivative over [-1, 1].

    Lorentz, Bernstein Polynomials, 1986: row i of the map from powers of u in [0, 1] is C(i, k)/C(m, k).
    """
    m = max(degree - 1, 0)
    rows = []
    for j in range(degree + 1):
        slope = chebyshev.Chebyshev.basis(j).deriv().convert(kind=Polynomial)
        inner = slope(Polynomial([-1.0, 2.0])).coef if j else np.zeros(1)
        powers = np.zeros(m + 1)
        powers[: inner.size] = inner
        rows.append([sum(math.comb(i, k) / math.comb(m, k) * powers[k] for k in range(i + 1)) for i in range(m + 1)])
    return np.array(rows).T
