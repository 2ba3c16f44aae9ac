"""Small, degenerate and extreme data."""

from fractions import Fraction

import numpy as np
import pytest

from service.core.observations import observe
from service.core.plan import MaxPermissibleError, Plan, Requirements, Resampling
from service.core.resolution import resolution
from service.errors import InvalidInput
from tests.core.data import Floats, close, fixed, noise, run, warning
from tests.core.walk import all_finite
from tests.reference.rational import digits, fit


def check_digits(x: Floats, y: Floats, degree: int, *, intercept: bool = True, wanted: float = 15 - 0.4) -> None:
    """Coefficients, their SDs, residual SD and R-squared against rational arithmetic on the same doubles."""
    curve = run(x, y, fixed(degree, intercept=intercept)).curve
    exact = fit([Fraction(v) for v in x.tolist()], [Fraction(v) for v in y.tolist()], degree, intercept=intercept)
    first = 0 if intercept else 1
    for k, (value, sd) in enumerate(zip(exact.coefficients, exact.coefficient_sd, strict=True), start=first):
        assert digits(curve.power.coefficients[k] or 0.0, value) >= wanted
        assert digits(curve.power.standard_errors[k] or 0.0, sd) >= wanted
    assert curve.power.digits == 15
    assert digits(curve.residual_sd or 0.0, exact.residual_sd) >= wanted
    assert digits(curve.r2 or 0.0, exact.r_squared) >= wanted
    if degree > 1 or intercept:
        assert exact.f is not None
        assert digits(curve.f.f or 0.0, exact.f) >= wanted


@pytest.mark.parametrize("unit", [1.0, 1e-30, 1e30, 1e-45])
@pytest.mark.parametrize("offset", [0.0, 1e8])
@pytest.mark.parametrize("degree", [1, 3])
def test_every_digit_far_from_zero_and_in_any_unit(degree: int, offset: float, unit: float) -> None:
    x = (offset + np.linspace(0, 10, 25)) * unit
    y = (1 + (x / unit - offset) ** degree + 0.1 * noise(25)) / unit
    check_digits(x, y, degree)


def test_every_digit_at_degree_12_and_without_intercept() -> None:
    x = np.linspace(0, 20, 60)
    check_digits(x, np.cos(x) + 0.01 * noise(60), 12)
    check_digits(x[1:], x[1:] ** 2 + noise(59), 4, intercept=False)


def test_chebyshev_coefficients_to_working_precision_far_from_zero() -> None:
    """From exact power coefficients about the middle of the range, in rational arithmetic."""
    x = 1e8 + np.linspace(0, 10, 21)
    y = np.sin(x - 1e8) + 0.1 * noise(21)
    curve = run(x, y, fixed(3)).curve
    t = [(2 * Fraction(v) - Fraction(x[0]) - Fraction(x[-1])) / (Fraction(x[-1]) - Fraction(x[0])) for v in x.tolist()]
    b = fit(t, [Fraction(v) for v in y.tolist()], 3).coefficients  # on powers of t
    chebyshev = [b[0] + b[2] / 2, b[1] + 3 * b[3] / 4, b[2] / 2, b[3] / 4]
    for ours, exact in zip(curve.coefficients, chebyshev, strict=True):
        assert digits(ours, exact) >= 15 - 0.4


def test_three_points() -> None:
    """A line has one point to spare: fitted, and undecided."""
    x, y = np.array([1.0, 2.0, 3.0]), np.array([1.0, 2.1, 2.9])
    found = run(x, y)
    all_finite(found)
    assert found.chosen_degree == 1
    assert close(found.curve.power.coefficients[1], 0.95)
    assert close(found.curve.residual_sd, 0.15 / np.sqrt(1.5))
    assert found.verdict.verdict == "undecided"
    assert found.verdict.advice
    assert [c.estimable for c in found.candidates] == [True, False, False, False, False, False]


def test_degree_zero() -> None:
    x = np.linspace(1, 10, 12)
    y = 5 + 0.1 * noise(12)
    found = run(x, y, Plan(min_degree=0, requirements=Requirements(monotonic=False)))
    assert found.chosen_degree == 0
    assert close(found.curve.power.coefficients[0], float(y.mean()))
    assert close(found.curve.residual_sd, float(y.std(ddof=1)))
    assert found.curve.f.f is None
    assert found.curve.f.reason
    assert close(found.candidates[0].loo.rmse, float(np.sqrt(np.mean(((y - y.mean()) * 12 / 11) ** 2))))
    # a constant cannot be used backwards, and the default plan says so
    assert run(x, y, fixed(0)).verdict.verdict == "inadequate"


def test_high_degree_is_found() -> None:
    x = np.linspace(-1, 1, 80)
    y = np.polynomial.chebyshev.chebval(x, [0.0, 40.0] + [0.0] * 9 + [0.05]) + 0.002 * noise(80)
    found = run(x, y, Plan(max_degree=12))
    assert found.chosen_degree in (1, 11)  # ten silent terms in between are more than the rule looks past
    assert run(x, y, Plan(max_degree=12, rule="bic")).chosen_degree == 11
    assert warning(run(x, y, Plan(max_degree=6)), "neighbours_correlated") is not None


def test_heavy_duplication() -> None:
    """Two thousand readings at four levels."""
    x = np.tile([1.0, 2.0, 3.0, 5.0], 500)
    y = x + 0.1 * noise(2000)
    found = run(x, y)
    all_finite(found)
    assert found.chosen_degree == 1
    assert found.levels == 4
    assert [c.degree for c in found.candidates if c.estimable] == [1, 2, 3]
    fit_test = found.candidates[0].lack_of_fit
    assert fit_test is not None
    assert fit_test.df == (2, 1996)


def test_more_points_than_are_listed() -> None:
    """Above 2000 points the per-point columns are left out, with a reason."""
    x = np.linspace(0, 1, 6001)
    found = run(x, x + 0.1 * noise(6001))
    assert found.diagnostics.points is None
    assert found.diagnostics.points_reason
    assert found.diagnostics.normality.method == "Jarque-Bera (1987)"
    assert found.chosen_degree == 1


@pytest.mark.parametrize("value", [0.0, 5.0, -1e-20, 3e40])
def test_constant_y(value: float) -> None:
    x = np.linspace(1, 10, 10)
    found = run(x, np.full(10, value))
    all_finite(found)
    assert found.chosen_degree == 1  # min_degree
    assert found.curve.r2 is None
    assert {"noise_at_rounding", "not_monotonic"} <= {w.code for w in found.warnings}
    assert found.verdict.verdict == "inadequate"
    assert all(c.step.f is None and c.step.reason for c in found.candidates)


@pytest.mark.parametrize("degree", [1, 2, 5, 8])
def test_exact_polynomial(degree: int) -> None:
    """No residual: no F, no division by zero, and the degree is still right."""
    x = np.arange(21.0)
    y = sum((x / 4) ** k for k in range(degree + 1))
    found = run(x, y, Plan(max_degree=10))
    all_finite(found)
    assert found.chosen_degree == degree
    step = found.candidates[degree - 1].step
    assert step.p == 0.0
    assert step.f is None
    assert all(c.step.p is None for c in found.candidates[degree:])
    assert found.diagnostics.breusch_pagan.reason == "the residuals are at the level of rounding"
    assert found.verdict.verdict == "conditional"


def test_zero_residual_without_intercept() -> None:
    x = np.arange(1.0, 11.0)
    found = run(x, 3 * x, Plan(intercept=False))
    assert found.chosen_degree == 1
    assert found.curve.power.coefficients == (0.0, 3.0)


def test_without_intercept_passes_through_zero() -> None:
    x = np.linspace(0, 10, 20)
    found = run(x, 2 * x + 0.1 * x**2 + 0.01 * noise(20, 1), Plan(intercept=False))
    lo, hi = found.curve.domain
    assert found.chosen_degree == 2
    at_zero = np.polynomial.chebyshev.chebval(-(lo + hi) / (hi - lo), found.curve.coefficients)
    assert abs(float(at_zero)) < 1e-12
    assert found.curve.power.coefficients[0] == 0.0
    assert [c.parameters for c in found.candidates] == [1, 2, 3, 4, 5, 6]


def test_near_replicates_are_replicates_only_when_said() -> None:
    x = np.repeat(np.linspace(1, 10, 8), 3) + np.tile([0.0, 1e-4, 2e-4], 8)
    y = 3 * x + 0.05 * noise(24)
    assert run(x, y).levels == 24
    found = run(x, y, level_tolerance=1e-3)
    assert found.levels == 8
    fit_test = found.candidates[0].lack_of_fit
    assert fit_test is not None
    assert fit_test.df == (6, 16)


def test_values_that_double_precision_cannot_tell_apart() -> None:
    """x within some units in the last place of 1: the columns of a parabola cannot be told apart."""
    x = 1 + np.arange(6) * 2.0**-52
    with pytest.raises(InvalidInput) as raised:
        run(np.append(x, 5.0), np.append(noise(6), 3.0), fixed(6))
    assert raised.value.errors[0].pointer == "/dataset/x"


def test_wide_span_of_uncertainties() -> None:
    x = np.linspace(1, 10, 12)
    u = np.geomspace(1e-12, 1e6, 12)
    found = run(x, 3 * x + u * noise(12), u_y=u)
    all_finite(found)
    assert close(found.curve.power.coefficients[1], 3.0, 1e-9)


BAD_DATA = [
    ({"x": [1, 2, 3], "y": [1, 2]}, "/y"),
    ({"x": [1, 2], "y": [1, 2]}, "/x"),
    ({"x": [1, float("nan"), 3], "y": [1, 2, 3]}, "/x/1"),
    ({"x": [1, 2, 3], "y": [1, float("inf"), 3]}, "/y/1"),
    ({"x": [1, 2, 1e308], "y": [1, 2, 3]}, "/x/2"),
    ({"x": [1, 2, 1e-300], "y": [1, 2, 3]}, "/x/2"),
    ({"x": [1, 2, 3], "y": [1, 2, 3], "u_y": [1, 0, 1]}, "/u_y/1"),
    ({"x": [1, 2, 3], "y": [1, 2, 3], "u_y": [1, 1]}, "/u_y"),
    ({"x": [1, 2, 3], "y": [1, 2, 3], "series": ["a"]}, "/series"),
    ({"x": [[1, 2, 3]], "y": [1, 2, 3]}, "/x"),
    ({"x": [1, 2, 3], "y": [1, 2, 3], "level_tolerance": -1.0}, "/level_tolerance"),
]


@pytest.mark.parametrize(("given", "pointer"), BAD_DATA)
def test_bad_data_name_the_place(given: dict[str, object], pointer: str) -> None:
    with pytest.raises(InvalidInput) as raised:
        observe(**given)  # type: ignore[arg-type]
    assert pointer in [e.pointer for e in raised.value.errors]


X5 = np.array([0.0, 1.0, 2.0, 3.0, 4.0])
CANNOT = [
    (Plan(), {"x": np.ones(5)}, "/dataset/x"),
    (fixed(4), {}, "/dataset/x"),
    (fixed(3), {"x": np.array([0.0, 0.0, 1.0, 1.0, 2.0])}, "/dataset/x"),
    (Plan(weights="1/x"), {}, "/dataset/x/0"),
    (Plan(weights="u_y"), {}, "/plan/weights"),
    (Plan(known_uncertainty=True), {}, "/plan/known_uncertainty"),
    (Plan(), {"u_x": np.ones(5)}, "/dataset/u_x"),
    (Plan(working_range=(10, 20)), {}, "/plan/working_range"),
    (Plan(working_range=(4, 20)), {}, "/plan/working_range"),
    (Plan(resampling=Resampling(scheme="leave_series_out")), {}, "/plan/resampling/scheme"),
]


@pytest.mark.parametrize(("plan", "given", "pointer"), CANNOT)
def test_plan_that_cannot_run_on_the_data(plan: Plan, given: dict[str, Floats], pointer: str) -> None:
    columns = {"x": X5, "y": noise(5)} | given
    with pytest.raises(InvalidInput) as raised:
        run(**columns, plan=plan)  # type: ignore[arg-type]
    assert pointer in [e.pointer for e in raised.value.errors]


BAD_PLANS = [
    ({"min_degree": -1}, "/min_degree"),
    ({"min_degree": 0, "intercept": False}, "/min_degree"),
    ({"max_degree": 13}, "/max_degree"),
    ({"min_degree": 3, "max_degree": 2}, "/max_degree"),
    ({"confidence": 1.0}, "/confidence"),
    ({"working_range": (2.0, 1.0)}, "/working_range"),
    ({"known_uncertainty": True, "weights": "equal"}, "/known_uncertainty"),
    ({"resampling": Resampling(folds=1)}, "/resampling/folds"),
    ({"resampling": Resampling(repeats=0)}, "/resampling/repeats"),
    ({"resampling": Resampling(seed=-1)}, "/resampling/seed"),
    ({"requirements": Requirements(min_r2=1.5)}, "/requirements/min_r2"),
    ({"requirements": Requirements(min_levels=1)}, "/requirements/min_levels"),
    ({"requirements": Requirements(max_unseen_bend=0.0)}, "/requirements/max_unseen_bend"),
    (
        {"requirements": Requirements(max_permissible_error=MaxPermissibleError(value=-1.0))},
        "/requirements/max_permissible_error/value",
    ),
]


@pytest.mark.parametrize(("given", "pointer"), BAD_PLANS)
def test_bad_plans_name_the_field(given: dict[str, object], pointer: str) -> None:
    with pytest.raises(InvalidInput) as raised:
        Plan(**given)  # type: ignore[arg-type]
    assert [e.pointer for e in raised.value.errors] == [pointer]


def test_known_uncertainty_stands_where_nothing_is_left() -> None:
    """y = 2 x + 1 to the last digit, u_y = 0.1: the line is as uncertain as the readings say, not certain."""
    x = np.arange(1.0, 9.0)
    found = run(x, 2 * x + 1, fixed(1, weights="u_y", known_uncertainty=True), u_y=np.full(8, 0.1))
    columns = np.vander(x, 2, increasing=True)
    wanted = 0.1 * np.sqrt(np.diag(np.linalg.inv(columns.T @ columns)))
    ours = found.curve.power
    assert np.allclose(np.array(ours.standard_errors, dtype=float), wanted, rtol=1e-10)
    assert np.allclose(np.array(ours.t, dtype=float), np.array([1.0, 2.0]) / wanted, rtol=1e-10)


def test_many_points_in_units_beyond_a_double() -> None:
    """Above the limit of exact arithmetic as below it: null where no double holds the power coefficient."""
    x = np.linspace(1, 10, 20_001)
    y = 2 * x + 0.01 * noise(20_001)
    found = run(1e-55 * x, 1e50 * y, fixed(6, requirements=Requirements(monotonic=False)))
    all_finite(found)
    power = found.curve.power
    assert power.coefficients[6] is None
    assert power.coefficients[1] is not None
    assert power.digits == 0
    assert "use the Chebyshev coefficients" in power.method


def test_a_constant_of_many_points_has_no_r_squared() -> None:
    x = np.linspace(1, 10, 20_001)
    found = run(x, np.full(20_001, 0.1), fixed(1))
    assert found.curve.r2 is None
    assert found.candidates[0].r2 is None


def test_three_points_say_nothing_of_normality() -> None:
    """Their residuals about a line have one shape, whatever the errors."""
    found = run(np.array([1.0, 2.0, 3.0]), np.array([1.1, 2.0, 3.2]))
    assert found.diagnostics.normality.p is None
    assert found.diagnostics.normality.reason == "fewer than 3 spare points"


@pytest.mark.parametrize(
    ("readings", "step"),
    [
        ([1.1, 2.0, 3.2], 0.1),  # by chance all three differ by multiples of 0.3
        ([0.5, 1.5, 2.5, 3.0, 4.5, 7.0], 0.5),
        ([10.0, 40.0, 60.0, 90.0, 150.0, 210.0], 10.0),
        ([0.02, 0.08, 0.14, 0.26, 0.38, 0.44], 0.02),  # by 0.06: scales come in 1, 2 and 5
        ([1.0, 1.0, 2.0], None),
    ],
)
def test_the_step_of_readings(readings: list[float], step: float | None) -> None:
    found = resolution(np.array(readings))
    assert found == step if step is None else close(found, step)
