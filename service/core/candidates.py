"""One record for every degree that the plan names."""

import math
from collections.abc import Sequence

import numpy as np

from service.core.criteria import aicc, bic
from service.core.cross_validation import HeldOut, leave_one_out_errors
from service.core.curve import is_monotonic
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
    loo = leave_one_out_errors(fits)
    criteria = (aicc(fits), bic(fits))
    out: list[Candidate] = []
    for degree in range(plan.min_degree, plan.max_degree + 1):
        if degree > fits.top:
            out.append(_inestimable(degree, fits))
            continue
        df, value = fits.df(degree), float(rss[degree])
        press = float(np.sum(loo[:, degree] ** 2))
        loo_ok = not math.isnan(press)
        spare_total = fits.n - 1 if fits.intercept else fits.n
        one_out = LeaveOneOut(
            rmse=math.sqrt(press / float(fits.weights.sum())) if loo_ok else None,
            r2=1 - press / tss if loo_ok and tss > 0 else None,
            reason=None if loo_ok else "without one of the points this degree cannot be fitted",
        )
        unscaled = np.abs(fits.residuals[:, degree]) / np.sqrt(fits.weights)
        a, b = (_finite(c[degree]) for c in criteria)
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
                cv=_cross_validation(held, degree, tss),
                step=_step(fits, degree, rss, float(p_values[degree]), known=plan.known_uncertainty),
                lack_of_fit=lack_of_fit[degree],
                max_abs_residual=float(unscaled.max()),
                monotonic=is_monotonic(fits.chebyshev(degree), fits.domain, working_range) if degree else False,
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
    if fits.rss[degree] <= fits.rounding_rss:
        return Test(f=None, df=dfs, p=0.0, reason="the residuals are at the level of rounding")
    return Test(f=gain / (float(rss[degree]) / df), df=dfs, p=p)


def _cross_validation(held: HeldOut, degree: int, tss: float) -> CrossValidation:
    used = held.estimable[:, degree]
    folds, count = used.size, int(used.sum())
    reason = None if count == folds else f"{folds - count} folds leave too few levels for this degree"
    if count == 0:
        return CrossValidation(
            rmse_mean=None, rmse_sd=None, r2_mean=None, r2_sd=None, folds_used=0, folds=folds, reason=reason
        )
    rmse = np.sqrt(held.sse[used, degree] / held.weight[used])
    repeats = int(held.repeat_of.max()) + 1
    r2: Floats | None = None
    if count == folds and tss > 0:
        r2 = 1 - np.bincount(held.repeat_of, weights=held.sse[:, degree], minlength=repeats) / tss
    return CrossValidation(
        rmse_mean=float(rmse.mean()),
        rmse_sd=float(rmse.std(ddof=1)) if count > 1 else None,
        r2_mean=float(r2.mean()) if r2 is not None else None,
        r2_sd=float(r2.std(ddof=1)) if r2 is not None and repeats > 1 else None,
        folds_used=count,
        folds=folds,
        reason=reason,
    )
