"""Tests on the residuals of one fit. Residuals are scaled by sqrt(weight), so equal variance is the null.

Each returns a Statistic that is None with a reason where it cannot be computed.
"""

import inspect

import numpy as np
from scipy import special, stats
from statsmodels.stats.stattools import jarque_bera

from service.core.basis import basis
from service.core.nested import NestedFits, reduced_qr
from service.core.observations import Floats, Integers, Observations
from service.core.result import Statistic
from service.core.tails import chi2_tail, f_tail

# the test itself: the axis and NaN handling around it costs more than it does
_shapiro = inspect.unwrap(stats.shapiro)
LEAST_SPARE_FOR_SLOPES = 3
LEAST_SPARE_FOR_NORMALITY = 3  # with fewer, residuals have the shape that the points give them, whatever the errors
SHAPIRO_MOST = 5000  # Royston's approximation is made for n up to 5000


def exact_reason(fits: NestedFits, degree: int) -> str | None:
    """Why residual tests mean nothing here, if so."""
    return "the residuals are at the level of rounding" if fits.rss[degree] <= fits.rounding_rss else None


def breusch_pagan(fits: NestedFits, degree: int) -> Statistic:
    """Studentised Breusch-Pagan test, auxiliary regressors x..x^d (Koenker, J. Econometrics 17 (1981) 107)."""
    method = "Breusch-Pagan test studentised by Koenker (1981), auxiliary x..x^d, LM = n R-squared"
    reason = exact_reason(fits, degree)
    if degree == 0:
        reason = "degree 0 has no regressor"
    elif fits.n <= degree + 1:
        reason = "too few points for the auxiliary regression"
    if reason:
        return Statistic(statistic=None, df=None, p=None, method=method, reason=reason)
    if fits.intercept and bool((fits.weights == fits.weights[0]).all()):
        q = fits.q[:, : degree + 1]
    else:
        # without intercept a degree may equal the number of levels, and the last columns add nothing
        columns = min(degree, np.unique(fits.x).size - 1) + 1
        q = reduced_qr(basis(fits.x, fits.domain, columns - 1, True))[0]
    e = fits.residuals[:, degree]
    squares = (e / np.abs(e).max()) ** 2  # relative: their squares must stay within the range of a double
    off = squares - squares.mean()
    total = float(off @ off)
    if total <= 1e-28 * fits.n:
        return Statistic(statistic=0.0, df=(degree,), p=1.0, method=method)
    fitted = q.T @ off
    lm = fits.n * min(1.0, float(fitted @ fitted) / total)
    df = q.shape[1] - 1
    return Statistic(statistic=lm, df=(df,), p=float(chi2_tail(lm, df)), method=method)


def serial_correlation(fits: NestedFits, degree: int, order: Integers | None) -> Statistic:
    """Durbin-Watson statistic in the order measured or along `order`; two-sided p.

    p from the beta distribution on [0, 4] with the statistic's exact null mean and variance
    (Durbin & Watson, Biometrika 38 (1951) 159).
    """
    method = "Durbin-Watson; two-sided p by the beta approximation of Durbin & Watson (1951)"
    df = fits.df(degree)
    reason = exact_reason(fits, degree)
    if reason is None and df < 2:
        reason = "fewer than 2 spare points"
    if reason:
        return Statistic(statistic=None, df=None, p=None, method=method, reason=reason)
    q, e = fits.q[:, : fits.columns(degree)], fits.residuals[:, degree]
    if order is not None:
        q, e = q[order], e[order]
    changes = e[1:] - e[:-1]
    d = float(changes @ changes) / float(e @ e)
    n = fits.n
    steps = q[1:] - q[:-1]
    b = steps.T @ steps  # Q'AQ, with A = D'D of first differences
    aq = np.zeros_like(q)
    aq[:-1] -= steps
    aq[1:] += steps
    trace = 2.0 * (n - 1) - float(b.trace())
    squares = 6.0 * n - 8 - 2 * float(np.vdot(aq, aq)) + float(np.vdot(b, b))
    mean = trace / df
    variance = 2 * (squares - trace * mean) / (df * (df + 2))
    if variance <= 0:
        return Statistic(statistic=d, df=None, p=None, method=method, reason="no freedom left in the residuals")
    m, v = mean / 4, variance / 16
    common = m * (1 - m) / v - 1
    below = float(special.betainc(m * common, (1 - m) * common, min(max(d / 4, 0.0), 1.0)))
    return Statistic(statistic=d, df=None, p=min(1.0, 2 * min(below, 1 - below)), method=method)


def reset(fits: NestedFits, degree: int) -> Statistic:
    """RESET with the second and third power of the fitted values (Ramsey, JRSS B 31 (1969) 350)."""
    method = "RESET (Ramsey 1969), powers 2 and 3 of the fitted values"
    df = fits.df(degree) - 2
    reason = exact_reason(fits, degree)
    if degree == 0:
        reason = "degree 0 has constant fitted values"
    elif df < 1:
        reason = "too few spare points"
    if reason:
        return Statistic(statistic=None, df=None, p=None, method=method, reason=reason)
    root_w = np.sqrt(fits.weights)
    fitted = fits.y - fits.residuals[:, degree] / root_w
    spread = float(fitted.std())
    if spread == 0:
        return Statistic(statistic=None, df=None, p=None, method=method, reason="constant fitted values")
    # where the curve has a constant, centring changes nothing but the rounding
    f = (fitted - fitted.mean()) / spread if fits.intercept else fitted / spread
    squared = f * f
    extra = np.stack((squared * root_w, squared * f * root_w), axis=1)
    return _added_columns(fits, degree, extra, method)


def series_difference(observations: Observations, fits: NestedFits, degree: int) -> Statistic:
    """F-test of an offset and a slope of each series from the common curve (analysis of covariance).

    Of offsets alone where the data cannot tell slopes, or leave too few points for both.
    """
    source = "(analysis of covariance; Draper & Smith 1998, ch. 14)"
    method = f"F-test of one offset per series {source}"
    labels = observations.series
    reason = exact_reason(fits, degree)
    names = list(dict.fromkeys(labels or ()))
    if len(names) < 2:
        reason = "the dataset does not name two series or more"
    # beside a constant one series is the reference of the others; a curve through 0 has none
    compared = names[1:] if fits.intercept else names
    if reason is None and fits.df(degree) - len(compared) < 1:
        reason = "too few spare points"
    if reason:
        return Statistic(statistic=None, df=None, p=None, method=method, reason=reason)
    of = np.array(labels)
    offsets = np.column_stack([(of == name).astype(np.float64) for name in compared]) * np.sqrt(fits.weights)[:, None]
    lo, hi = fits.domain
    t = ((fits.x - lo) + (fits.x - hi)) / (hi - lo)
    slopes = offsets * t[:, None]
    if not fits.intercept:
        slopes = slopes[:, 1:]  # all together they are the slope of the curve itself
    both = np.column_stack((offsets, slopes))
    if degree > 0 and fits.df(degree) - both.shape[1] >= LEAST_SPARE_FOR_SLOPES:
        found = _added_columns(fits, degree, both, f"F-test of one offset and one slope per series {source}")
        if found.p is not None:
            return found
    return _added_columns(fits, degree, offsets, method)


def _added_columns(fits: NestedFits, degree: int, extra: Floats, method: str) -> Statistic:
    """F-test of regressors added to the fit; they may not lie in its span."""
    q = fits.q[:, : fits.columns(degree)]
    before = np.sqrt(np.einsum("ij,ij->j", extra, extra))
    extra = extra - q @ (q.T @ extra)
    extra -= q @ (q.T @ extra)
    q2, r2 = reduced_qr(extra)
    if (np.abs(np.diagonal(r2)) <= 1e-10 * before).any():
        reason = "the added terms cannot be told from the curve itself"
        return Statistic(statistic=None, df=None, p=None, method=method, reason=reason)
    m = extra.shape[1]
    df = fits.df(degree) - m
    gain = q2.T @ fits.residuals[:, degree]
    explained = float(gain @ gain)
    left = fits.residuals[:, degree] - q2 @ gain
    rss = float(left @ left)
    if rss <= fits.rounding_rss:
        return Statistic(statistic=None, df=(m, df), p=0.0, method=method, reason="the added terms leave no residual")
    f = explained / m / (rss / df)
    return Statistic(statistic=f, df=(m, df), p=float(f_tail(f, m, df)), method=method)


def normality(fits: NestedFits, degree: int) -> Statistic:
    """Shapiro-Wilk (Royston, Appl. Stat. 44 (1995) 547) up to n = 5000, beyond it Jarque-Bera (1987)."""
    large = fits.n > SHAPIRO_MOST
    method = "Jarque-Bera (1987)" if large else "Shapiro-Wilk (Royston 1995)"
    reason = exact_reason(fits, degree)
    if reason is None and fits.df(degree) < LEAST_SPARE_FOR_NORMALITY:
        reason = f"fewer than {LEAST_SPARE_FOR_NORMALITY} spare points"
    if reason:
        return Statistic(statistic=None, df=None, p=None, method=method, reason=reason)
    e = fits.residuals[:, degree]
    if large:
        value, p = jarque_bera(e)[:2]
    else:
        value, p = _shapiro(e / np.abs(e).max())
    return Statistic(statistic=float(value), df=None, p=float(p), method=method)


def consistency(fits: NestedFits, degree: int, *, absolute: bool) -> Statistic:
    """Chi-square of the residuals against the stated uncertainties, two-sided p (ISO/TS 28038:2018)."""
    method = "chi-square of the weighted residuals against the stated u_y"
    df = fits.df(degree)
    if not absolute:
        reason = "no absolute uncertainties were given or used"
    elif df < 1:
        reason = "no spare points"
    else:
        value = float(fits.rss[degree])
        above = float(chi2_tail(value, df))
        p = min(1.0, 2 * min(above, 1 - above))
        return Statistic(statistic=value, df=(df,), p=p, method=method)
    return Statistic(statistic=None, df=None, p=None, method=method, reason=reason)


def next_terms(fits: NestedFits, degree: int, *, most: int = 3) -> Statistic:
    """Joint F-test of the next terms above the chosen degree, as many as the data can estimate."""
    method = f"joint F-test of up to {most} further terms"
    last = min(degree + most, fits.top)
    reason = exact_reason(fits, degree)
    if last <= degree:
        reason = "the data can estimate no further term"
    if reason:
        return Statistic(statistic=None, df=None, p=None, method=method, reason=reason)
    m, df = last - degree, fits.df(last)
    if fits.rss[last] <= fits.rounding_rss:
        return Statistic(statistic=None, df=(m, df), p=0.0, method=method, reason="further terms leave no residual")
    f = float((fits.rss[degree] - fits.rss[last]) / m / (fits.rss[last] / df))
    return Statistic(statistic=f, df=(m, df), p=float(f_tail(f, m, df)), method=method)
