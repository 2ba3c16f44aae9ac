"""What must not change, and what must change in a known way."""

from dataclasses import replace

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from service.core.plan import Plan, Resampling
from service.core.result import Result
from tests.core.data import Floats, close, fixed, run

SETTINGS = settings(max_examples=60, deadline=None)
LEAVE_ONE_OUT = Resampling(scheme="leave_one_out")  # folds that do not depend on the order of the points
seeds = st.integers(0, 2**32)


def draw(seed: int, *, repeats: int = 1) -> tuple[Floats, Floats]:
    """8 to 40 nearly even levels on -2..8, a curve of degree 1 to 4, normal errors."""
    rng = np.random.default_rng(seed)
    n = int(rng.integers(8, 41))
    x = np.repeat(np.linspace(-2, 8, n) + rng.uniform(-3, 3, n) / n, repeats)
    coefficients = rng.normal(size=int(rng.integers(2, 6)))
    return x, np.polynomial.polynomial.polyval(x / 4, coefficients) + rng.uniform(0.01, 0.5) * rng.normal(size=x.size)


def same_numbers(a: Result, b: Result, *, y_scale: float = 1.0, tolerance: float = 1e-7) -> None:
    """Chosen degree and every candidate's numbers, those in units of y (or its square) scaled."""
    assert a.chosen_degree == b.chosen_degree
    for one, other in zip(a.candidates, b.candidates, strict=True):
        assert one.estimable == other.estimable
        if not one.estimable:
            continue
        pairs = [
            (one.rss, other.rss, y_scale**2),
            (one.residual_sd, other.residual_sd, y_scale),
            (one.press, other.press, y_scale**2),
            (one.loo.rmse, other.loo.rmse, y_scale),
            (one.cv.rmse_mean, other.cv.rmse_mean, y_scale),
            (one.step.f, other.step.f, 1.0),
            (one.max_abs_residual, other.max_abs_residual, y_scale),
            (one.r2, other.r2, 1.0),
        ]
        for found, wanted, scale in pairs:
            assert (found is None) == (wanted is None)
            if wanted is not None:
                assert close(found, wanted * scale, tolerance, absolute=1e-7 * scale)
        assert one.monotonic == other.monotonic


@SETTINGS
@given(seeds)
def test_order_of_points(seed: int) -> None:
    x, y = draw(seed)
    order = np.random.default_rng(seed + 1).permutation(x.size)
    plan = Plan(resampling=LEAVE_ONE_OUT)
    a, b = run(x, y, plan), run(x[order], y[order], plan)
    same_numbers(a, b, tolerance=1e-9)
    assert a.curve.power == b.curve.power  # exact arithmetic: to the last digit
    assert a.weights.used == b.weights.used
    assert close(b.unseen_bend.y, a.unseen_bend.y or 0.0)
    for name in ("breusch_pagan", "durbin_watson_by_x", "reset", "normality", "largest_studentised", "next_terms"):
        one, other = getattr(a.diagnostics, name), getattr(b.diagnostics, name)
        assert close(other.statistic, one.statistic, 1e-6, absolute=1e-9)
    assert a.diagnostics.points is not None
    assert b.diagnostics.points is not None
    np.testing.assert_allclose(
        np.array(a.diagnostics.points.residual)[order], b.diagnostics.points.residual, atol=1e-10
    )


@SETTINGS
@given(seeds, st.integers(-20, 20), st.floats(-50, 50), st.sampled_from([-1.0, 1.0]))
def test_shift_and_scale_of_x(seed: int, power: int, shift: float, sign: float) -> None:
    """Equal weights: the unit and the zero of x change nothing but the curve's own coordinates."""
    x, y = draw(seed)
    plan = Plan(weights="equal", resampling=LEAVE_ONE_OUT)
    a, b = run(x, y, plan), run(sign * 2.0**power * (x + shift), y, plan)
    same_numbers(a, b)
    assert close(b.unseen_bend.y, a.unseen_bend.y or 0.0, 1e-6)
    assert {w.code for w in a.warnings} == {w.code for w in b.warnings} or borderline(a, b)


def borderline(a: Result, b: Result) -> bool:
    """Warnings differ only in what concerns powers of x, which do depend on the zero of x."""
    return {w.code for w in a.warnings} ^ {w.code for w in b.warnings} <= {"power_terms_look_insignificant"}


@SETTINGS
@given(seeds, st.integers(-60, 60), st.floats(-20, 20), st.sampled_from([-1.0, 1.0]))
def test_shift_and_scale_of_y(seed: int, power: int, shift: float, sign: float) -> None:
    x, y = draw(seed)
    plan = Plan(weights="equal")
    scale = 2.0**power
    a, b = run(x, y, plan), run(x, sign * scale * (y + shift), plan)
    same_numbers(b, a, y_scale=scale)
    assert close(b.unseen_bend.y, scale * (a.unseen_bend.y or 0.0), 1e-6)
    assert close(b.unseen_bend.in_single_readings, a.unseen_bend.in_single_readings or 0.0, 1e-6)


@SETTINGS
@given(seeds, st.floats(1e-6, 1e6))
def test_scale_of_weights(seed: int, factor: float) -> None:
    """u_y all times a factor: the same curve and choice, sums of squares by its square, as weights are relative."""
    x, y = draw(seed)
    u = np.exp(np.random.default_rng(seed + 1).normal(size=x.size))
    a, b = run(x, y, u_y=u), run(x, y, u_y=factor * u)
    assert a.chosen_degree == b.chosen_degree
    np.testing.assert_allclose(b.curve.coefficients, a.curve.coefficients, rtol=1e-8, atol=1e-10)
    for one, other in zip(a.candidates, b.candidates, strict=True):
        if one.rss is not None:
            assert close(other.rss, one.rss / factor**2, 1e-8)
            assert one.loo.rmse is not None
            assert close(other.loo.rmse, one.loo.rmse, 1e-7)
            assert one.cv.rmse_mean is not None
            assert close(other.cv.rmse_mean, one.cv.rmse_mean, 1e-7)
            assert close(other.r2, one.r2 or 0.0, 1e-8, absolute=1e-10)
    np.testing.assert_allclose(b.curve.covariance, a.curve.covariance, rtol=1e-6, atol=1e-12)  # type: ignore[arg-type]


@SETTINGS
@given(seeds, st.integers(2, 4))
def test_whole_dataset_repeated(seed: int, times: int) -> None:
    """The same points several times over: the same curves, sums of squares times as large, pure error none."""
    x, y = draw(seed)
    plan = fixed(2)
    a, b = run(x, y, plan), run(np.tile(x, times), np.tile(y, times), plan)
    np.testing.assert_allclose(b.curve.coefficients, a.curve.coefficients, rtol=1e-9, atol=1e-11)
    assert close(b.candidates[0].rss, times * (a.candidates[0].rss or 0.0))
    assert close(b.candidates[0].r2, a.candidates[0].r2 or 0.0)
    assert b.levels == a.levels
    assert b.candidates[0].lack_of_fit is not None
    assert b.candidates[0].lack_of_fit.f is None
    assert b.candidates[0].lack_of_fit.reason == "the replicates agree to the level of rounding"


@SETTINGS
@given(seeds, st.integers(2, 5))
def test_replicate_means_with_their_weight_give_the_same_curve(seed: int, repeats: int) -> None:
    """Readings of a level replaced by their mean, u_y smaller by the root of their number."""
    x, y = draw(seed, repeats=repeats)
    level, at = np.unique(x, return_inverse=True)
    means = np.bincount(at, y) / repeats
    u = np.ones(x.size)
    plan = fixed(2, weights="u_y")
    whole = run(x, y, plan, u_y=u)
    short = run(level, means, plan, u_y=np.full(level.size, 1 / np.sqrt(repeats)))
    np.testing.assert_allclose(short.curve.coefficients, whole.curve.coefficients, rtol=1e-8, atol=1e-10)
    pure = float(np.sum((y - means[at]) ** 2))
    assert close((whole.candidates[0].rss or 0.0) - pure, short.candidates[0].rss or 0.0, 1e-6, absolute=1e-9)


@SETTINGS
@given(seeds, st.integers(-200, 800))
def test_a_further_reading_on_the_curve_changes_nothing(seed: int, hundredths: int) -> None:
    x, y = draw(seed)
    plan = fixed(2)
    a = run(x, y, plan)
    at = float(np.clip(hundredths / 100, x.min(), x.max()))  # inside: the domain stays
    lo, hi = a.curve.domain
    value = float(np.polynomial.chebyshev.chebval((2 * at - lo - hi) / (hi - lo), a.curve.coefficients))
    b = run(np.append(x, at), np.append(y, value), plan)
    np.testing.assert_allclose(b.curve.coefficients, a.curve.coefficients, rtol=1e-8, atol=1e-10)
    assert close(b.candidates[0].rss, a.candidates[0].rss or 0.0, 1e-8)


@SETTINGS
@given(st.lists(st.integers(-50, 50), min_size=2, max_size=5), st.integers(8, 30), seeds)
def test_exact_polynomials_are_recovered(coefficients: list[int], n: int, seed: int) -> None:
    """Integer polynomials on integers: every coefficient exactly, and the degree (to 4: as far as one look reaches)."""
    while len(coefficients) > 1 and coefficients[-1] == 0:
        coefficients = coefficients[:-1]
    degree = len(coefficients) - 1
    x = np.random.default_rng(seed).permutation(np.arange(n) - 4.0)
    y = np.polynomial.polynomial.polyval(x, coefficients)
    found = run(x, y, Plan(min_degree=0, requirements=replace(Plan().requirements, monotonic=False)))
    assert found.chosen_degree == degree
    assert found.curve.power.coefficients == tuple(map(float, coefficients))
    assert found.candidates[degree].rss == 0.0
    assert "noise_at_rounding" in {w.code for w in found.warnings}
    assert {r.degree for r in found.decision.rules} == {degree}


@SETTINGS
@given(seeds)
def test_raising_min_degree_never_lowers_the_choice(seed: int) -> None:
    x, y = draw(seed)
    chosen = [run(x, y, Plan(min_degree=d)).chosen_degree for d in range(5)]
    assert chosen == [max(chosen[0], d) for d in range(5)]


@SETTINGS
@given(seeds)
def test_the_same_input_gives_the_same_result(seed: int) -> None:
    x, y = draw(seed)
    assert run(x, y) == run(x, y)
