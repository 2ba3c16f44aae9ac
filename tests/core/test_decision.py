"""How the degree is chosen: the spending of chance, the walk, the screen, the other rules, stability, weights."""

import math

import numpy as np
import pytest
from sklearn.model_selection import RepeatedKFold

from service.core.choice import choose_degree
from service.core.least_bend import (
    SHARES,
    gap_factors,
    gap_ratios,
    size_under_null,
    spending,
    term_p_values,
    walk,
    walk_many,
)
from service.core.nested import fit_all
from service.core.plan import Plan, Resampling
from service.core.weighting import restricted_log_likelihood
from tests.benchmarks.null_size import sizes
from tests.core.data import Floats, calibration, close, noise, run


def test_spending() -> None:
    assert spending(6) == 0.06
    assert close(spending(100), 0.02)
    assert math.isclose(sum(SHARES), 1.0)


def test_walk_by_hand() -> None:
    """n = 100: a = 0.02, so the levels of looks 1 to 4 are 0.014, 0.004, 0.0014 and 0.0006."""
    one = [1.0] * 8
    p = [1, 0.5, 0.0039, 0.5, 0.5, 0.0013, 0.5, 0.5]
    looks = walk(p, one, 100)
    assert [look.to_degree for look in looks] == [2, 5, 5]
    assert [term for term, _, _ in looks[0].looked] == [1, 2]
    assert [level for _, _, level in looks[1].looked] == pytest.approx([0.014, 0.004, 0.0014])
    assert looks[2].threshold is None
    # one look too far, or just above its level: not taken
    assert walk([1, 0.5, 0.0041, 0.5, 0.5, 0.5, 0.5], one, 100)[-1].to_degree == 0
    assert walk([1, 0.5, 0.5, 0.5, 0.5, 1e-9], one, 100)[-1].to_degree == 0
    # a gap factor divides the level
    assert walk([1, 0.5, 0.0039], [1, 1, 0.5], 100)[-1].to_degree == 0
    assert walk([1.0], [1.0], 100)[-1].to_degree == 0


def test_walk_of_many_equals_walk_of_each() -> None:
    rng = np.random.default_rng(1)
    p = np.where(rng.random((500, 8)) < 0.3, 10.0 ** rng.uniform(-5, -1, (500, 8)), 1.0)
    p[:, 0] = 1
    factors = rng.uniform(0.3, 1, 8)
    n = rng.integers(5, 200, 500).astype(float)
    each = [walk(row.tolist(), factors.tolist(), int(k))[-1].to_degree for row, k in zip(p, n, strict=True)]
    assert walk_many(p, factors, n).tolist() == each
    assert len(set(each)) > 4


def test_gap_factor() -> None:
    """Prediction variance over the range against that of one reading, by an explicit inverse at many places."""
    x = np.array([0.0, 0.1, 0.2, 0.3, 0.4, 5.0])
    w = np.array([1.0, 2, 1, 2, 1, 4])
    fits = fit_all(x, np.zeros(6), w, top=2)
    grid = np.linspace(0, 5, 201)
    for degree in range(3):
        design, on_grid = np.vander(x, degree + 1), np.vander(grid, degree + 1)
        inverse = np.linalg.inv(design.T @ (w[:, None] * design))
        variance = np.einsum("ij,jk,ik->i", on_grid, inverse, on_grid)
        largest = variance.max() / (1 / w.min())
        assert close(float(gap_ratios(fits)[degree]) ** 2, largest, 1e-8)
        assert close(float(gap_factors(gap_ratios(fits))[degree]), min(1.0, 4 / largest), 1e-8)


def test_p_values_skipped_below_every_level() -> None:
    """Leaving out small F changes no choice: no level exceeds 0.042."""
    rss = np.array([[10.0, 9.0, 4.0, 3.9], [10.0, 1.0, 0.95, 0.9]])
    df = np.array([[9.0, 8, 7, 6], [9.0, 8, 7, 6]])
    whole = term_p_values(rss, df, 0.0, known_uncertainty=False)
    short = term_p_values(rss, df, 0.0, known_uncertainty=False, least_f=4.0)
    assert (whole[short != whole] > 0.045).all()
    assert (short == whole).sum() >= 4


@pytest.mark.parametrize("n", [6, 30])
def test_size_under_null_by_simulation(n: int) -> None:
    predicted, observed = sizes(n, 40_000)
    assert abs(observed - predicted) < 4 * math.sqrt(predicted / 40_000)


def test_size_in_the_result() -> None:
    x, y = calibration(20, 3, seed=1)
    found = run(x, y, Plan(weights="equal"))
    factors = gap_factors(gap_ratios(fit_all(x, y, np.ones(60), top=6)))
    assert close(found.decision.size, size_under_null(factors.tolist(), 60, 1))
    keep = math.prod(1 - spending(60) * s * f for s, f in zip(SHARES, factors[2:6].tolist(), strict=True))
    assert close(found.decision.size, 1 - keep)


def test_trail_in_numbers_and_words() -> None:
    found = run(*calibration(20, 1, bend=0.1), Plan(weights="equal"))
    assert [s.action for s in found.decision.steps] == ["jump", "jump", "stop"]
    jump, stop = found.decision.steps[1], found.decision.steps[2]
    assert (jump.from_degree, jump.to_degree, jump.term) == (1, 2, 2)
    assert jump.p is not None
    assert jump.threshold is not None
    assert jump.p <= jump.threshold
    assert f"term 2: p {jump.p:.2g} against {jump.threshold:.2g}" in jump.words
    assert stop.words.startswith("Stop at degree 2: no further term within its level (term 3: p ")
    raised = run(*calibration(20, 1, bend=0.1), Plan(min_degree=3, weights="equal"))
    assert raised.chosen_degree == 3
    assert raised.decision.steps[-1].action == "raise"
    assert raised.decision.steps[-1].words == "The plan's min_degree raises the choice from 2 to 3."


def test_look_ahead_finds_an_even_curve() -> None:
    """y = x^4 about 0: the odd terms are silent, and each is looked past."""
    x = np.linspace(-1, 1, 40)
    assert choose_degree(x, x**4 + 0.01 * noise(40)) == 4


def test_screen_is_for_choosing_only() -> None:
    """A wild reading would add degrees; the walk without it does not, and the curve is still fitted to all points."""
    x = np.linspace(0, 10, 9)
    y = next(
        y
        for y in (bumped(1 + 2 * x + 0.05 * noise(9, seed), at, 0.5) for seed in range(200) for at in (0, 4, 8))
        if choose_degree(x, y, screen=False) > 1 == choose_degree(x, y)
    )
    found = run(x, y, Plan(weights="equal"))
    assert found.chosen_degree == 1
    assert close(found.curve.power.coefficients[1], float(np.polyfit(x, y, 1)[0]), 1e-8)


def bumped(y: Floats, at: int, size: float) -> Floats:
    out = y.copy()
    out[at] += size
    return out


def test_screen_sets_aside_two_at_most() -> None:
    x = np.linspace(0, 10, 30)
    y = x + 0.01 * noise(30)
    y[[5, 15, 25]] += [3.0, -4.0, 5.0]
    found = run(x, y, Plan(weights="equal"))
    assert len([s for s in found.decision.steps if s.action == "set_aside"]) == 2


def test_known_uncertainty_takes_z_tests() -> None:
    """Six points: a bend of five of its standard deviations shows in z; F, with three to spare, cannot see it."""
    x = np.linspace(0, 10, 6)
    u = np.full(6, 0.1)
    fits = fit_all(x, np.zeros(6), 1 / u**2, top=3)
    bend = fits.q[:, 2] * 4.0 * 0.1
    y = 3 * x + bend + 0.1 * noise(6, 5)
    known = run(x, y, Plan(max_degree=3, known_uncertainty=True), u_y=u)
    assert known.chosen_degree == 2
    step = known.candidates[1].step
    assert step.df == (1,)
    assert close(step.f, float(fit_all(x, y, 1 / u**2, top=3).qty[2] ** 2))
    assert close(known.curve.power.standard_errors[1], 0.1 * float(np.sqrt(inverse_of_normal(x, 2)[1, 1])), 1e-8)
    assert known.diagnostics.consistency.statistic is not None


def inverse_of_normal(x: Floats, degree: int) -> Floats:
    design = np.vander(x, degree + 1, increasing=True)
    return np.linalg.inv(design.T @ design)


def test_other_rules_by_their_definitions() -> None:
    """Each rule from the candidates' own numbers, on data where they differ."""
    plan = Plan(weights="equal", resampling=Resampling(folds=5, repeats=1))
    for seed in range(12):
        found = run(*calibration(14, bend=0.006, seed=seed), plan)
        by_rule = {r.rule: r.degree for r in found.decision.rules}
        least = {
            "aicc": min(found.candidates, key=lambda c: c.aicc if c.aicc is not None else math.inf),
            "bic": min(found.candidates, key=lambda c: c.bic if c.bic is not None else math.inf),
            # one repeat: 1 - R-squared is the pooled error over the total
            "lowest_cv": max(found.candidates, key=lambda c: c.cv.r2_mean if c.cv.r2_mean is not None else -math.inf),
        }
        assert {rule: c.degree for rule, c in least.items()} == {rule: by_rule[rule] for rule in least}
        assert by_rule["one_standard_error"] <= by_rule["lowest_cv"]  # type: ignore[operator]
        for rule in least:
            chosen = run(
                *calibration(14, bend=0.006, seed=seed), Plan(weights="equal", rule=rule, resampling=plan.resampling)
            )  # type: ignore[arg-type]
            assert chosen.chosen_degree == by_rule[rule]
            assert chosen.decision.steps[0].action == "pick"
            assert chosen.decision.size is None


def test_one_standard_error_by_explicit_refits() -> None:
    """Breiman, Friedman, Olshen and Stone 1984, 3.4.3, with numpy's own fits on the same folds."""
    x, y = calibration(30, bend=0.003, sd=0.1, seed=3)
    folds = list(RepeatedKFold(n_splits=6, n_repeats=4, random_state=2).split(x))
    errors = np.array(
        [
            [np.mean((y[out] - np.polyval(np.polyfit(x[train], y[train], d), x[out])) ** 2) for d in range(1, 6)]
            for train, out in folds
        ]
    )  # folds of one size: the pooled mean is the mean of means
    mean = errors.mean(axis=0)
    best = int(np.argmin(mean))
    se = np.mean([part[:, best].std(ddof=1) / math.sqrt(6) for part in errors.reshape(4, 6, 5)])
    wanted = 1 + int(np.argmax(mean <= mean[best] + se))
    plan = Plan(max_degree=5, weights="equal", resampling=Resampling(folds=6, repeats=4, seed=2))
    by_rule = {r.rule: r.degree for r in run(x, y, plan).decision.rules}
    assert by_rule["one_standard_error"] == wanted
    assert by_rule["lowest_cv"] == 1 + best


def test_a_rule_that_cannot_choose_falls_back_and_says_so() -> None:
    """Two points to spare at most: no AICc at any degree."""
    x = np.array([1.0, 2.0, 3.0])
    found = run(x, np.array([1.0, 2.1, 2.9]), Plan(rule="aicc"))
    assert found.chosen_degree == 1
    step = found.decision.steps[-1]
    assert step.action == "fall_back"
    assert "aicc cannot choose here" in step.words
    assert next(r for r in found.decision.rules if r.rule == "aicc").reason


def test_stability_equals_walks_on_the_rest() -> None:
    """Each fold really left out: the same rule on the rest, with the gap factors of the whole."""
    x, y = calibration(14, bend=0.01, sd=0.06, seed=5)
    found = run(x, y, Plan(weights="equal", resampling=Resampling(scheme="leave_one_out")))
    factors = gap_factors(gap_ratios(fit_all(x, y, np.ones(14), top=6))).tolist()
    picks = []
    for i in range(14):
        rest = np.delete(np.arange(14), i)
        lo, hi = x.min(), x.max()
        design = np.polynomial.chebyshev.chebvander((2 * x[rest] - lo - hi) / (hi - lo), 6)
        rss = [
            np.sum((y[rest] - d @ np.linalg.lstsq(d, y[rest])[0]) ** 2) for d in (design[:, : k + 1] for k in range(7))
        ]
        p = term_p_values(np.array(rss), 12.0 - np.arange(7), 0.0, known_uncertainty=False)
        picks.append(max(1, walk(p.tolist(), factors, 13)[-1].to_degree))
    shares = {s.degree: s.share for s in found.decision.stability.shares}
    assert shares == {d: picks.count(d) / 14 for d in sorted(set(picks))}
    assert found.decision.stability.resamples == 14


def test_automatic_weights() -> None:
    x = np.geomspace(1, 100, 50)
    proportional = run(x, 5 * x * (1 + 0.02 * noise(50)))
    assert proportional.weights.used == "1/x^2"
    assert [m.weights for m in proportional.weights.compared] == ["equal", "1/x", "1/x^2"]
    assert proportional.weights.compared[0].gain_over_equal == 0.0
    assert run(x, 5 * x + noise(50)).weights.used == "equal"
    between = run(x, 5 * x + 0.1 * np.sqrt(x) * noise(50))
    assert between.weights.used == "1/x"
    assert "x holds 0" in run(x - 1, x).weights.why
    assert "within 1.5 times" in run(300 + x, 5 * x + noise(50)).weights.why


def test_restricted_likelihood_by_contrasts() -> None:
    """The likelihood of n - p orthonormal contrasts that are free of the curve, up to a constant (Harville 1977)."""
    x = np.linspace(1, 10, 9)
    y = x + 0.1 * noise(9)
    design = np.vander(x, 3)
    contrasts = np.linalg.svd(design.T)[2][3:]
    values, ours = [], []
    for w in (np.ones(9), 1 / x, 1 / x**2):
        covariance = contrasts @ np.diag(1 / w) @ contrasts.T
        z = contrasts @ y
        s2 = z @ np.linalg.solve(covariance, z) / 6
        values.append(-0.5 * (6 * math.log(s2) + np.linalg.slogdet(covariance)[1]))
        ours.append(restricted_log_likelihood(fit_all(x, y, w, top=2), 2))
    assert np.ptp(np.array(values) - ours) < 1e-10
