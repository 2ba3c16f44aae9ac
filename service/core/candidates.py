"""One record for every degree that the plan names."""

import math
from collections.abc import Sequence

import numpy as np

from service.core.criteria import Criteria
from service.core.cross_validation import HeldOut, leave_one_out_errors
from service.core.curve import which_monotonic
from service.core.exact import ExactFit
from service.core.nested import NestedFits
from service.core.observations import Floats
from service.core.plan import Plan
from service.core.result import Candidate, CrossValidation, LeaveOneOut, Test

NO_CV = CrossValidation(
    rmse_mean=None, rmse_sd=None, r2_mean=None, r2_sd=None, folds_used=0, folds=0, reason="not estimable"
)


def describe_candidates(
    fits: NestedFits,
    held: HeldOut,
    criteria: Criteria,
    plan: Plan,
    *,
    p_values: Floats,
    lack_of_fit: Sequence[Test | None],
    exact: ExactFit | None,
    working_range: tuple[float, float],
) -> list[Candidate]:
    """Degrees min_degree..max_degree; those that the data cannot estimate say so."""
    rss = fits.rss.copy()
    if exact is not None:
        first = 0 if fits.intercept else 1
        rss[first : first + len(exact.rss_below)] = exact.rss_below
    tss = float(rss[0]) if fits.intercept else fits.tss
    if exact is None and tss <= fits.rounding_rss:
        tss = 0.0  # y is constant but for rounding
    loo = leave_one_out_errors(fits)
    cvs = _cross_validations(held, tss)
    largest = np.abs(fits.residuals / np.sqrt(fits.weights)[:, None]).max(axis=0)
    presses = np.sum(loo * loo, axis=0)
    total = float(fits.weights.sum())
    monotonic = which_monotonic(fits.all_chebyshev(), fits.domain, working_range)
    out: list[Candidate] = []
    for degree in range(plan.min_degree, plan.max_degree + 1):
        if degree > fits.top:
            out.append(_inestimable(degree, fits))
            continue
        df, value = fits.df(degree), float(rss[degree])
        press = float(presses[degree])
        loo_ok = not math.isnan(press)
        spare_total = fits.n - 1 if fits.intercept else fits.n
        one_out = LeaveOneOut(
            rmse=math.sqrt(press / total) if loo_ok else None,
            r2=1 - press / tss if loo_ok and tss > 0 else None,
            reason=None if loo_ok else "without one of the points this degree cannot be fitted",
        )
        a, b = (_finite(c[degree]) for c in (criteria.aicc, criteria.bic))
        out.append(
            Candidate(
                degree=degree,
                parameters=fits.columns(degree),
                rss=value,
                residual_sd=math.sqrt(value / df),
                r2=1 - value / tss if tss > 0 else None,
                adj_r2=1 - (value / df) / (tss / spare_total) if tss > 0 else None,
                aicc=a,
                bic=b,
                press=press if loo_ok else None,
                loo=one_out,
                cv=cvs[degree],
                step=_step(fits, degree, rss, float(p_values[degree]), known=plan.known_uncertainty),
                lack_of_fit=lack_of_fit[degree],
                max_abs_residual=float(largest[degree]),
                monotonic=monotonic[degree],
                estimable=True,
                reason=_criteria_reason(a, b),
            )
        )
    return out


def _finite(value: float) -> float | None:
    return float(value) if math.isfinite(value) else None


def _criteria_reason(a: float | None, b: float | None) -> str | None:
    if b is None:
        return "aicc and bic have no bound: the residuals are at the level of rounding"
    return "aicc needs at least two points more than coefficients and one" if a is None else None


def _inestimable(degree: int, fits: NestedFits) -> Candidate:
    reason = f"the data can estimate degree {fits.top} at most and keep a point to spare"
    empty = Test(f=None, df=(1,), p=None, reason="not estimable")
    return Candidate(
        degree=degree,
        parameters=fits.columns(degree),
        rss=None,
        residual_sd=None,
        r2=None,
        adj_r2=None,
        aicc=None,
        bic=None,
        press=None,
        loo=LeaveOneOut(rmse=None, r2=None, reason="not estimable"),
        cv=NO_CV,
        step=empty,
        lack_of_fit=None,
        max_abs_residual=None,
        monotonic=None,
        estimable=False,
        reason=reason,
    )


def _step(fits: NestedFits, degree: int, rss: Floats, p: float, *, known: bool) -> Test:
    df = fits.df(degree)
    dfs = (1,) if known else (1, df)
    if degree == 0:
        return Test(f=None, df=dfs, p=None, reason="degree 0 adds no term")
    if fits.rss[degree - 1] <= fits.rounding_rss:
        return Test(f=None, df=dfs, p=None, reason="the lower degree already meets the data to rounding")
    gain = max(float(rss[degree - 1] - rss[degree]), 0.0)
    if known:
        return Test(f=gain, df=dfs, p=p)
    if fits.rss[degree] <= fits.rounding_rss or rss[degree] == 0:
        return Test(f=None, df=dfs, p=0.0, reason="the residuals are at the level of rounding")
    return Test(f=gain / (float(rss[degree]) / df), df=dfs, p=p)


def _cross_validations(held: HeldOut, tss: float) -> list[CrossValidation]:
    """By degree 0..top."""
    folds = held.size.size
    rmse = np.sqrt(held.sse / held.weight[:, None])
    used = held.estimable.sum(axis=0).tolist()
    whole = min(used) == folds
    mean, sd = _mean_and_sd(rmse) if whole else (np.empty(0), np.empty(0))
    r2_mean, r2_sd = _r2(held, tss)
    repeats = int(held.repeat_of[-1]) + 1
    out: list[CrossValidation] = []
    for degree, count in enumerate(used):
        if whole:
            m, s = float(mean[degree]), float(sd[degree])
        elif count:
            part = rmse[held.estimable[:, degree], degree]
            m, s = (float(v[0]) for v in _mean_and_sd(part[:, None]))
        else:
            m = s = math.nan
        out.append(
            CrossValidation(
                rmse_mean=_finite(m),
                rmse_sd=_finite(s),
                r2_mean=_finite(r2_mean[degree]),
                r2_sd=_finite(r2_sd[degree]),
                folds_used=count,
                folds=folds,
                reason=_cv_reason(folds, folds - count, tss, repeats),
            )
        )
    return out


def _cv_reason(folds: int, lost: int, tss: float, repeats: int) -> str | None:
    """Why some of the numbers are missing, or rest on fewer folds."""
    if lost:
        return f"{lost} {'fold leaves' if lost == 1 else 'folds leave'} too few levels for this degree"
    if tss <= 0:
        return "R-squared has no value, since y is constant"
    if folds == 1:
        return "one fold has no standard deviation"
    return "one repeat has no standard deviation of R-squared" if repeats == 1 else None


def _r2(held: HeldOut, tss: float) -> tuple[Floats, Floats]:
    """Mean and SD over repeats of 1 - (held-out sum of squares)/(sum of squares about the mean); NaN without value."""
    if tss <= 0:
        nothing = np.full(held.sse.shape[1], np.nan)
        return nothing, nothing
    first = np.flatnonzero(np.diff(held.repeat_of, prepend=-1))
    return _mean_and_sd(1 - np.add.reduceat(held.sse, first, axis=0) / tss)


def _mean_and_sd(values: Floats) -> tuple[Floats, Floats]:
    """Mean and sample SD down each column; the SD of one row is NaN."""
    rows = values.shape[0]
    mean = values.sum(axis=0) / rows
    off = values - mean
    sd = np.sqrt((off * off).sum(axis=0) / (rows - 1)) if rows > 1 else np.full(mean.shape, np.nan)
    return mean, sd
