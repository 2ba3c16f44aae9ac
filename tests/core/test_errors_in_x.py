"""Errors in both coordinates, against published values and against a minimiser over curve and points at once."""

from typing import Any

import numpy as np
import pytest
from numpy.polynomial import chebyshev
from scipy.optimize import least_squares

from service.core.nested import Design
from service.core.plan import Plan
from service.core.result import Result
from service.errors import InvalidInput
from tests.core.data import Floats, close, fixed, noise, run


def bent(points: int, u_x: float, u_y: float, *, seed: int = 0) -> tuple[Floats, Floats, dict[str, Any]]:
    """Readings of a bent curve with errors in x and y, and their uncertainties, which differ from point to point."""
    true = np.linspace(1.0, 11.0, points)
    spread = np.linspace(0.5, 1.5, points)
    x = true + u_x * spread * noise(points, seed)
    y = 1.0 + 2.0 * true + 0.08 * true**2 + u_y * noise(points, seed + 1)
    return x, y, {"u_x": u_x * spread, "u_y": np.full(points, u_y)}


def of_degree(degree: int, **more: Any) -> Plan:
    return fixed(degree, **({"weights": "u_y"} | more))


def test_the_line_of_pearsons_data_with_yorks_weights() -> None:
    """York, Can. J. Phys. 44 (1966) 1079: 5.4799 and -0.4805; both to 10 digits in later papers (from memory)."""
    x = np.array([0.0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4])
    y = np.array([5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5])
    of_x = np.array([1000, 1000, 500, 800, 200, 80, 60, 20, 1.8, 1.0])
    of_y = np.array([1.0, 1.8, 4.0, 8.0, 20, 20, 70, 70, 100, 500])
    found = run(x, y, of_degree(1), u_x=of_x**-0.5, u_y=of_y**-0.5)
    intercept, slope = found.curve.power.coefficients
    assert close(intercept, 5.47991022403, 1e-10)
    assert close(slope, -0.48053340745, 1e-10)
    assert close(found.curve.residual_sd, (11.8663531941 / 8) ** 0.5, 1e-10)
    assert found.curve.power.digits == 9
    assert found.weights.used == "u_y and u_x"


@pytest.mark.parametrize("intercept", [True, False])
@pytest.mark.parametrize(("degree", "u_x"), [(1, 0.01), (2, 0.001), (2, 0.1), (3, 0.3), (5, 0.05)])
def test_curve_and_points_are_where_the_sum_of_squares_is_least(degree: int, u_x: float, intercept: bool) -> None:
    """scipy moves the coefficients and every x at once; nothing is linear there, and nothing is nested."""
    x, y, given = bent(25, u_x, 0.05)
    found = run(x, y, of_degree(degree, intercept=intercept, known_uncertainty=True), **given)
    lo, hi = found.curve.domain
    assert (lo, hi) == (x.min(), x.max())
    rows = degree + 1 if intercept else degree

    def value(b: Floats, at: Floats) -> Floats:
        t = (2 * at - lo - hi) / (hi - lo)
        return np.asarray(chebyshev.chebval(t, b) if intercept else at / hi * chebyshev.chebval(t, b))

    def off(unknown: Floats) -> Floats:
        b, moved = unknown[:rows], unknown[rows:]
        return np.concatenate(((y - value(b, moved)) / given["u_y"], (moved - x) / given["u_x"]))

    start = Design.of(x, y, top=degree, intercept=intercept).fit(np.ones_like(x))
    begin = np.concatenate((start.r_inverse @ start.qty, x))
    best = least_squares(off, begin, xtol=1e-15, ftol=1e-15, gtol=1e-15, x_scale="jac")
    grid = np.linspace(lo, hi, 50)
    ours = chebyshev.chebval((2 * grid - lo - hi) / (hi - lo), np.array(found.curve.coefficients))
    assert np.allclose(ours, value(best.x[:rows], grid), rtol=1e-7, atol=1e-8)
    assert close(found.curve.residual_sd, (2 * best.cost / (25 - rows)) ** 0.5, 1e-9)
    if intercept:  # its covariance, from the Jacobian in all unknowns
        covariance = np.linalg.inv(best.jac.T @ best.jac)[:rows, :rows]
        assert found.curve.covariance is not None
        assert np.allclose(np.array(found.curve.covariance), covariance, rtol=1e-4, atol=1e-9)


def test_negligible_errors_in_x_change_nothing() -> None:
    x, y, given = bent(20, 1e-9, 0.05)
    with_them = run(x, y, Plan(), **given)
    without = run(x, y, Plan(), u_y=given["u_y"])
    assert with_them.chosen_degree == without.chosen_degree
    assert np.allclose(with_them.curve.coefficients, without.curve.coefficients, rtol=1e-9)


def test_the_degree_is_chosen_with_them() -> None:
    """Standards that are off by more than u_y look like a bend where nobody says how uncertain they are."""
    true = np.linspace(1.0, 11.0, 20)
    x, y = true + 0.3 * noise(20), 1.0 + 2.0 * true + 0.005 * noise(20, 1)
    u_y = np.full(20, 0.005)
    sure = run(x, y, Plan(known_uncertainty=True), u_y=u_y)
    unsure = run(x, y, Plan(known_uncertainty=True), u_x=np.full(20, 0.3), u_y=u_y)
    assert sure.chosen_degree > unsure.chosen_degree == 1
    assert unsure.weights.why.endswith("the chosen curve by orthogonal distance regression")


@pytest.mark.parametrize("rule", ["least_bend", "aicc", "bic", "lowest_cv", "one_standard_error"])
def test_whatever_chooses_the_curve_is_that_of_its_degree(rule: str) -> None:
    """Choosing and regressing do not wait for each other, so they cannot go round in circles."""
    for seed in range(40):
        x, y, given = bent(15, 0.3, 0.2, seed=seed)
        chosen = run(x, y, Plan(rule=rule), **given)  # type: ignore[arg-type]
        alone = run(x, y, of_degree(chosen.chosen_degree), **given)
        if "did not settle" not in chosen.weights.why + alone.weights.why:
            assert np.allclose(chosen.curve.coefficients, alone.curve.coefficients, rtol=1e-6, atol=1e-6)


def test_candidates_are_compared_by_the_effective_variance() -> None:
    """A line: u^2 = u_y^2 + slope^2 u_x^2, the slope that of the same fit."""
    x, y, given = bent(25, 0.2, 0.05)
    found = run(x, y, of_degree(1), **given)
    slope = 0.0
    for _ in range(100):
        w = 1 / (given["u_y"] ** 2 + (slope * given["u_x"]) ** 2)
        line = np.polyfit(x, y, 1, w=np.sqrt(w))
        slope = float(line[0])
    assert close(found.candidates[0].rss, float(np.sum(w * (y - np.polyval(line, x)) ** 2)), 1e-7)


@pytest.mark.parametrize(("in_x", "in_y"), [(1e-12, 1e9), (1e7, 1e-20), (1e-30, 1e-30), (1e40, 1e-40)])
def test_units_do_not_matter(in_x: float, in_y: float) -> None:
    x, y, given = bent(18, 0.05, 0.05)
    plain = run(x, y, Plan(), **given)
    scaled = run(x * in_x, y * in_y, Plan(), u_x=given["u_x"] * in_x, u_y=given["u_y"] * in_y)
    assert plain.chosen_degree == scaled.chosen_degree
    assert np.allclose(np.array(plain.curve.coefficients) * in_y, scaled.curve.coefficients, rtol=1e-8)


def test_far_from_zero() -> None:
    x, y, given = bent(18, 0.05, 0.05)
    near, far = (run(x + shift, y, of_degree(2), **given) for shift in (0.0, 2.0**23))
    assert np.allclose(near.curve.coefficients, far.curve.coefficients, rtol=1e-6)


def test_replicates_stay_one_level() -> None:
    """Their x are adjusted apart, but what was posted as one level counts as one."""
    x = np.repeat(np.arange(1.0, 7.0), 3)
    y = 2 * x + 0.05 * noise(18)
    found = run(x, y, Plan(), u_x=np.full(18, 0.02), u_y=np.full(18, 0.05))
    assert found.levels == 6
    assert found.candidates[0].lack_of_fit is not None
    assert found.diagnostics.points is not None
    assert np.allclose(np.array(found.diagnostics.points.fitted) + found.diagnostics.points.residual, y)


def test_uncertainties_that_swamp_the_readings_are_refused() -> None:
    x, y, _ = bent(12, 0.1, 0.1)
    with pytest.raises(InvalidInput) as caught:
        run(x * 1e-50, y * 1e50, Plan(), u_x=np.full(12, 1e59), u_y=np.full(12, 1e48))
    assert caught.value.errors[0].pointer == "/dataset/u_x"


@pytest.mark.parametrize("seed", range(12))
def test_huge_uncertainties_end_in_a_curve_and_say_how(seed: int) -> None:
    """Where the standards are as uncertain as the whole range, there may be no best curve; nothing breaks."""
    x, y, given = bent(12, 8.0, 0.05, seed=seed)
    found: Result = run(x, y, Plan(), **given)
    assert np.isfinite(found.curve.coefficients).all()
    assert "orthogonal distance regression" in found.weights.why
