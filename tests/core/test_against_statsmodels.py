"""Fits, tests and diagnostics against statsmodels (and scipy's Shapiro-Wilk) on the same data.

statsmodels gets the columns of powers of x scaled to [-1, 1]: none of the numbers compared depends on the basis.
"""

import math
from functools import cache

import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats
from statsmodels.regression.linear_model import RegressionResultsWrapper
from statsmodels.stats.diagnostic import het_breuschpagan, linear_reset
from statsmodels.stats.outliers_influence import OLSInfluence
from statsmodels.stats.stattools import durbin_watson

from service.core.plan import Plan
from service.core.result import Result
from tests.core.data import Floats, close, fixed, noise, run

CASES = [(n, degree, weighted) for n in (12, 30, 150) for degree in (1, 2, 4) for weighted in (False, True)]
PLAIN = [(n, degree) for n, degree, weighted in CASES if not weighted]


@cache
def dataset(n: int) -> tuple[Floats, Floats, Floats]:
    """x in fives at even levels, y, and uncertainties over a factor of five."""
    rng = np.random.default_rng(n)
    x = rng.permutation(np.repeat(np.linspace(-3, 17, max(n // 3, 6)), 3)[:n] if n > 12 else np.linspace(-3, 17, n))
    u = np.exp(rng.uniform(0, np.log(5), n)) / 5
    return x, 1 - x + 0.2 * x**2 + 0.004 * x**3 + u * noise(n, n), u


@cache
def reference(n: int, degree: int, weighted: bool) -> RegressionResultsWrapper:
    x, y, u = dataset(n)
    design = scaled_powers(x, degree)
    return sm.WLS(y, design, weights=1 / u**2).fit() if weighted else sm.OLS(y, design).fit()


def scaled_powers(x: Floats, degree: int) -> Floats:
    return np.vander((x - 7) / 10, degree + 1, increasing=True)


@cache
def result(n: int, degree: int, weighted: bool) -> Result:
    x, y, u = dataset(n)
    plan = fixed(degree, weights="u_y" if weighted else "equal")
    return run(x, y, plan, u_y=u if weighted else None)


@pytest.mark.parametrize(("n", "degree", "weighted"), CASES)
def test_fit(n: int, degree: int, weighted: bool) -> None:
    ours, theirs = result(n, degree, weighted), reference(n, degree, weighted)
    candidate, curve = ours.candidates[0], ours.curve
    assert candidate.parameters == degree + 1
    assert curve.degrees_of_freedom == theirs.df_resid
    assert close(candidate.rss, theirs.ssr)
    assert close(curve.residual_sd, math.sqrt(theirs.scale))
    assert close(candidate.r2, theirs.rsquared)
    assert close(candidate.adj_r2, theirs.rsquared_adj)
    assert close(curve.f.f, theirs.fvalue)
    assert close(curve.f.p, theirs.f_pvalue, 1e-8)
    # statsmodels counts coefficients only; R's convention, ours, counts the variance too
    assert close(candidate.bic, theirs.bic + math.log(n))
    k = degree + 2
    assert close(candidate.aicc, theirs.aic + 2 + 2 * k * (k + 1) / (n - k - 1))


@pytest.mark.parametrize(("n", "degree", "weighted"), CASES)
def test_coefficients_and_their_t_tests(n: int, degree: int, weighted: bool) -> None:
    """Powers of raw x, for which the reference is a fit to raw powers: its digits are few, so 1e-6."""
    x, y, u = dataset(n)
    raw = np.vander(x, degree + 1, increasing=True)
    w = 1 / u**2 if weighted else np.ones(n)
    theirs = sm.WLS(y, raw, weights=w).fit(method="qr")
    power = result(n, degree, weighted).curve.power
    np.testing.assert_allclose(power.coefficients, theirs.params, rtol=1e-6)  # type: ignore[arg-type]
    np.testing.assert_allclose(power.standard_errors, theirs.bse, rtol=1e-6)  # type: ignore[arg-type]
    np.testing.assert_allclose(power.t, theirs.tvalues, rtol=1e-6)  # type: ignore[arg-type]
    np.testing.assert_allclose(power.p, theirs.pvalues, rtol=1e-5, atol=1e-300)  # type: ignore[arg-type]


@pytest.mark.parametrize(("n", "degree", "weighted"), CASES)
def test_step_of_each_term(n: int, degree: int, weighted: bool) -> None:
    x, y, u = dataset(n)
    plan = Plan(min_degree=0, max_degree=degree, weights="u_y" if weighted else "equal")
    for ours in run(x, y, plan, u_y=u if weighted else None).candidates[1:]:
        f, p, _ = reference(n, ours.degree, weighted).compare_f_test(reference(n, ours.degree - 1, weighted))
        assert ours.step.df == (1, n - ours.degree - 1)
        assert close(ours.step.f, f, 1e-8, absolute=1e-9)
        assert close(ours.step.p, p, 1e-7)


@pytest.mark.parametrize(("n", "degree", "weighted"), CASES)
def test_lack_of_fit(n: int, degree: int, weighted: bool) -> None:
    """Against the model with a mean for each level."""
    x, y, u = dataset(n)
    ours = result(n, degree, weighted).candidates[0].lack_of_fit
    levels, at = np.unique(x, return_inverse=True)
    if levels.size == n:
        assert ours is None
        return
    means = np.eye(levels.size)[at]
    full = sm.WLS(y, means, weights=1 / u**2 if weighted else np.ones(n)).fit()
    f, p, _ = full.compare_f_test(reference(n, degree, weighted))
    assert ours is not None
    assert ours.df == (levels.size - degree - 1, n - levels.size)
    assert close(ours.f, f, 1e-8)
    assert close(ours.p, p, 1e-7)


@pytest.mark.parametrize(("n", "degree", "weighted"), CASES)
def test_next_terms(n: int, degree: int, weighted: bool) -> None:
    f, p, _ = reference(n, degree + 3, weighted).compare_f_test(reference(n, degree, weighted))
    ours = result(n, degree, weighted).diagnostics.next_terms
    assert ours.df == (3, n - degree - 4)
    assert close(ours.statistic, f, 1e-8)
    assert close(ours.p, p, 1e-7)


@pytest.mark.parametrize(("n", "degree", "weighted"), CASES)
def test_breusch_pagan_and_durbin_watson(n: int, degree: int, weighted: bool) -> None:
    x, _, _ = dataset(n)
    e = reference(n, degree, weighted).wresid
    ours = result(n, degree, weighted).diagnostics
    lm, p, _, _ = het_breuschpagan(e, scaled_powers(x, degree))
    assert close(ours.breusch_pagan.statistic, lm, 1e-8)
    assert close(ours.breusch_pagan.p, p, 1e-7)
    assert close(ours.durbin_watson_measured.statistic, durbin_watson(e))
    assert close(ours.durbin_watson_by_x.statistic, durbin_watson(e[np.argsort(x, kind="stable")]))


@pytest.mark.parametrize(("n", "degree"), PLAIN)
def test_reset_and_shapiro_wilk(n: int, degree: int) -> None:
    theirs = linear_reset(reference(n, degree, False), power=3, use_f=True)
    ours = result(n, degree, False).diagnostics
    assert close(ours.reset.statistic, theirs.fvalue, 1e-6)
    assert close(ours.reset.p, theirs.pvalue, 1e-6)
    w, p = stats.shapiro(reference(n, degree, False).resid)
    assert close(ours.normality.statistic, w, 1e-8)
    assert close(ours.normality.p, p, 1e-6)


@pytest.mark.parametrize(("n", "degree"), PLAIN)
def test_influence(n: int, degree: int) -> None:
    theirs = OLSInfluence(reference(n, degree, False))
    found = result(n, degree, False)
    ours = found.diagnostics.points
    assert ours is not None
    np.testing.assert_allclose(ours.leverage, theirs.hat_matrix_diag, rtol=1e-9)
    np.testing.assert_allclose(ours.studentised, theirs.resid_studentized_external, rtol=1e-8)  # type: ignore[arg-type]
    np.testing.assert_allclose(ours.cooks_distance, theirs.cooks_distance[0], rtol=1e-8, atol=1e-15)  # type: ignore[arg-type]
    np.testing.assert_allclose(ours.fitted, reference(n, degree, False).fittedvalues, rtol=1e-9)
    assert close(found.candidates[0].press, theirs.ess_press)
    table = reference(n, degree, False).outlier_test()  # Bonferroni p in the last column
    table = np.asarray(table)
    worst = found.diagnostics.largest_studentised_point
    assert worst == int(np.argmax(np.abs(table[:, 0])))
    assert close(found.diagnostics.largest_studentised.p, table[worst, -1], 1e-7)


@pytest.mark.parametrize(("n", "degree"), PLAIN)
def test_series_offsets_and_slopes(n: int, degree: int) -> None:
    """F-test of one offset and one slope per series, against the model with dummy columns and their products."""
    x, y, _ = dataset(n)
    series = [("a", "b", "c")[i % 3] for i in range(n)]
    ours = run(x, y, fixed(degree), series=series).diagnostics.series
    of = [np.array(series) == s for s in ("b", "c")]
    dummies = np.column_stack([scaled_powers(x, degree), *of, *(one * scaled_powers(x, 1)[:, 1] for one in of)])
    f, p, _ = sm.OLS(y, dummies.astype(float)).fit().compare_f_test(reference(n, degree, False))
    assert ours.df == (4, n - degree - 5)
    assert close(ours.statistic, f, 1e-8)
    assert close(ours.p, p, 1e-7)


@pytest.mark.parametrize("degree", [1, 2, 3])
def test_no_intercept(degree: int) -> None:
    x, y, u = dataset(30)
    columns = np.column_stack([((x - 0.0) / 20) ** k for k in range(1, degree + 1)])
    theirs = sm.OLS(y, columns).fit()
    ours = run(x, y, fixed(degree, intercept=False))
    assert ours.curve.degrees_of_freedom == theirs.df_resid
    assert close(ours.candidates[0].rss, theirs.ssr)
    assert close(ours.candidates[0].r2, theirs.rsquared)
    assert close(ours.candidates[0].adj_r2, theirs.rsquared_adj)
    assert close(ours.curve.f.f, theirs.fvalue)
    np.testing.assert_allclose(ours.diagnostics.points.leverage, OLSInfluence(theirs).hat_matrix_diag, rtol=1e-9)  # type: ignore[union-attr]
    assert ours.curve.power.coefficients[0] == 0.0
    assert ours.curve.power.standard_errors[0] is None


def test_durbin_watson_p_by_simulation() -> None:
    """The beta approximation against 20,000 simulated statistics under the same design (two-sided, at three places)."""
    x = np.linspace(0, 1, 15)
    design = np.vander(x, 3)
    hat = design @ np.linalg.pinv(design)
    e = np.random.default_rng(3).normal(size=(20_000, 15))
    e -= e @ hat.T
    simulated = np.sum(np.diff(e, axis=1) ** 2, axis=1) / np.sum(e**2, axis=1)
    for seed in range(40):
        found = run(x, x + noise(15, seed), fixed(2)).diagnostics.durbin_watson_measured
        assert found.statistic is not None
        below = np.mean(simulated <= found.statistic)
        assert close(found.p, 2 * min(below, 1 - below), 0.0, absolute=0.02)
