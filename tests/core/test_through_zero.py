"""Curves without a constant: the tests on their residuals must not bring one in, or lean on one that is not there."""

import numpy as np
import statsmodels.api as sm
from statsmodels.stats.diagnostic import het_breuschpagan

from service.core.plan import Plan
from tests.core.data import close, fixed, noise, run

X = np.tile([1.0, 2.0, 3.0], 6)
Y = 2 * X + 0.3 * X**2 + 0.1 * noise(18)


def test_breusch_pagan_where_the_degree_is_the_number_of_levels() -> None:
    """Powers 0 to 3 at three levels have rank 3: two of them are regressors."""
    found = run(X, Y, fixed(3, intercept=False))
    e = Y - sm.OLS(Y, np.column_stack([X, X**2, X**3])).fit().fittedvalues
    lm, p, _, _ = het_breuschpagan(e, np.column_stack([np.ones(18), X, X**2]))
    ours = found.diagnostics.breusch_pagan
    assert ours.df == (2,)
    assert close(ours.statistic, lm, 1e-8)
    assert close(ours.p, p, 1e-8)
    order = np.random.default_rng(1).permutation(18)
    assert close(run(X[order], Y[order], fixed(3, intercept=False)).diagnostics.breusch_pagan.statistic, lm, 1e-8)


def test_reset_adds_powers_of_the_fitted_values_and_no_constant() -> None:
    x = np.linspace(1, 10, 25)
    y = 2 * x + 0.1 * noise(25)
    ours = run(x, y, fixed(1, intercept=False)).diagnostics.reset
    line = sm.OLS(y, x).fit()
    f = line.fittedvalues
    wanted, p, _ = sm.OLS(y, np.column_stack([x, f**2, f**3])).fit().compare_f_test(line)
    assert close(ours.statistic, wanted, 1e-8)
    assert close(ours.p, p, 1e-8)


def test_the_order_of_series_does_not_matter() -> None:
    x = np.tile(np.linspace(1, 10, 9), 2)
    y = 2 * x + 0.1 * noise(18) + np.repeat([0.2, 0.0], 9)
    series = ["up"] * 9 + ["down"] * 9
    plan = fixed(1, intercept=False)
    ours = run(x, y, plan, series=series).diagnostics.series
    turned = run(x[::-1], y[::-1], plan, series=series[::-1]).diagnostics.series
    assert close(ours.statistic, turned.statistic or 0.0)
    up = np.repeat([1.0, 0.0], 9)
    columns = np.column_stack([x, up, 1 - up, up * x])
    wanted, p, _ = sm.OLS(y, columns).fit().compare_f_test(sm.OLS(y, x).fit())
    assert ours.df == (3, 14)
    assert close(ours.statistic, wanted, 1e-8)
    assert close(ours.p, p, 1e-8)


def test_the_message_names_the_forced_zero() -> None:
    x = np.linspace(1, 10, 25)
    found = run(x, 2 * x + 1 + 0.01 * noise(25), Plan(max_degree=1, intercept=False))
    (bends,) = [w for w in found.warnings if w.code == "curvature_left"]
    assert "does not read 0 at 0" in bends.message
