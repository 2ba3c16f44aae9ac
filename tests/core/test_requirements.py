"""Requirements, each with values worked out by hand, and the verdict they lead to."""

import numpy as np
import pytest

from service.core.plan import BackCalculated, MaxPermissibleError, Plan, Requirements
from service.core.result import RequirementAnswer, Result
from service.errors import InvalidInput
from tests.core.data import Floats, close, fixed, noise, run

# y = 2 + 3 x exactly, but for two pairs of opposite errors that leave the least-squares line where it is
X = np.array([0.0, 1.0, 2.0, 3.0, 4.0, 5.0, 6.0, 7.0, 8.0])
OFF = np.array([0.3, -0.3, -0.3, 0.3, 0.0, 0.3, -0.3, -0.3, 0.3])
Y = 2 + 3 * X + OFF


def answer(asked: Requirements, *, x: Floats = X, y: Floats = Y, degree: int = 1, **plan: object) -> RequirementAnswer:
    return answered(run(x, y, fixed(degree, requirements=asked, **plan)))


def answered(found: Result) -> RequirementAnswer:
    """The one answer besides `monotonic`."""
    return next(a for a in found.requirements if a.requirement != "monotonic")


def test_the_line_is_where_the_hand_puts_it() -> None:
    found = run(X, Y, fixed(1))
    assert close(found.curve.power.coefficients[0], 2.0)
    assert close(found.curve.power.coefficients[1], 3.0)


@pytest.mark.parametrize(
    ("of", "kind", "value", "found", "met"),
    [
        ("y", "absolute", 0.5, 0.3, True),
        ("y", "absolute", 0.2, 0.3, False),
        ("x", "absolute", 0.11, 0.1, True),  # 0.3 / 3
        ("x", "absolute", 0.09, 0.1, False),
        ("y", "percent_of_span", 2.0, 100 * 0.3 / 24, True),  # the curve spans 2 to 26
        ("x", "percent_of_span", 1.0, 100 * 0.1 / 8, False),
        ("y", "percent_of_value", 20.0, 100 * 0.3 / 2, True),  # worst at x = 0, where the curve is at 2
        ("x", "percent_of_value", 5.0, 100 * 0.1 / 1, False),  # worst at x = 1; x = 0 has no percentage
    ],
)
def test_maximum_permissible_error(of: str, kind: str, value: float, found: float, met: bool) -> None:
    mpe = MaxPermissibleError(value=value, of=of, kind=kind)  # type: ignore[arg-type]
    said = answer(Requirements(max_permissible_error=mpe))
    assert said.requirement == "max_permissible_error"
    assert close(said.found, found, 1e-9)
    assert said.met is met
    assert said.unit == (of if kind == "absolute" else "percent")
    assert said.asked == {"value": value, "of": of, "kind": kind}
    if kind == "percent_of_value":
        assert said.worst_point == (0 if of == "y" else 1)
        assert said.worst_x == X[said.worst_point]


def test_maximum_permissible_error_counts_the_working_range_only() -> None:
    y = Y.copy()
    y[8] += 5
    mpe = Requirements(max_permissible_error=MaxPermissibleError(value=0.001))
    said = answer(mpe, y=y, working_range=(0.0, 5.0))
    assert said.worst_x is not None
    assert said.worst_x <= 5


def test_error_in_x_needs_a_monotonic_curve() -> None:
    x = np.linspace(0, 4, 9)
    mpe = Requirements(max_permissible_error=MaxPermissibleError(value=1.0, of="x"), monotonic=False)
    said = answer(mpe, x=x, y=x * (4 - x) + 0.01 * noise(9), degree=2)
    assert said.met is False
    assert said.found is None
    assert "not monotonic" in said.message


def test_monotonic() -> None:
    found = run(X, Y, fixed(1))
    (said,) = found.requirements
    assert said.met is True
    assert close(said.found, 3.0)
    turning = run(X, X * (6 - X) + 0.01 * noise(9), fixed(2))
    (said,) = turning.requirements
    assert said.met is False
    assert said.worst_x is not None
    assert abs(said.worst_x) in (0.0, 8.0) or abs(said.worst_x - 3) < 0.1
    assert turning.verdict.verdict == "inadequate"


@pytest.mark.parametrize(("least", "met"), [(9, True), (10, False)])
def test_min_levels(least: int, met: bool) -> None:
    said = answer(Requirements(min_levels=least))
    assert (said.found, said.met) == (9.0, met)


@pytest.mark.parametrize(("least", "met"), [(0.998, True), (0.9999, False)])
def test_min_r2(least: float, met: bool) -> None:
    said = answer(Requirements(min_r2=least))
    assert close(said.found, 1 - np.sum(OFF**2) / np.sum((Y - Y.mean()) ** 2))
    assert said.met is met


def test_min_r2_of_a_constant_is_undecided() -> None:
    found = run(X, np.full(9, 4.0), fixed(1, requirements=Requirements(min_r2=0.9, monotonic=False)))
    assert answered(found).met is None
    assert found.verdict.verdict == "undecided"
    assert "min_r2_undecided" in {r.code for r in found.verdict.reasons}


def test_back_calculated() -> None:
    """x found from y is off by 0.1: 10 % at x = 1, 5 % at 2, 3.33 % at 3, 0 at 4, 2 % at 5, 1.67, 1.43, 1.25 %."""

    def share(limit: float, lowest: float | None = None, least: float = 1.0) -> RequirementAnswer:
        rule = BackCalculated(limit_percent=limit, limit_percent_lowest=lowest, min_share=least)
        return answer(Requirements(back_calculated=rule))

    assert (share(4.0).found, share(4.0).met) == (6 / 8, False)
    assert share(4.0, least=0.75).met is True
    assert (share(6.0).found, share(6.0, lowest=10.5).found) == (7 / 8, 1.0)
    assert share(6.0).worst_point == 1
    assert share(1.0).asked == {"limit_percent": 1.0, "limit_percent_lowest": None, "min_share": 1.0}


def test_back_calculated_at_levels_with_repeats_counts_points() -> None:
    x, y = np.repeat(X, 2), np.repeat(Y, 2)
    rule = BackCalculated(limit_percent=4.0, min_share=0.5)
    said = answer(Requirements(back_calculated=rule), x=x, y=y)
    assert said.found == 12 / 16


def test_back_calculated_of_a_cubic_inverts_it() -> None:
    x = np.linspace(1, 10, 19)
    y = x + 0.02 * x**3
    y[9] *= 1.05
    found = run(x, y, fixed(3, requirements=Requirements(back_calculated=BackCalculated(limit_percent=1e-3))))
    said = answered(found)
    c = found.curve.power.coefficients
    roots = np.roots([c[3], c[2], c[1], (c[0] or 0.0) - y[9]])  # type: ignore[list-item]
    back = next(float(r.real) for r in roots if abs(r.imag) < 1e-9 and 1 <= r.real <= 10)
    assert said.worst_point == 9
    assert f"{100 * abs(back / x[9] - 1):.4g} %" in said.message


@pytest.mark.parametrize(("allowed", "met"), [(100.0, True), (0.01, None)])
def test_max_unseen_bend(allowed: float, met: bool | None) -> None:
    found = run(X, Y, fixed(1, requirements=Requirements(max_unseen_bend=allowed)))
    said = answered(found)
    assert said.found == found.unseen_bend.y
    assert said.met is met
    assert (found.verdict.verdict == "undecided") is (met is None)


def test_every_requirement_at_once_in_a_fixed_order() -> None:
    asked = Requirements(
        max_permissible_error=MaxPermissibleError(value=1.0),
        min_levels=3,
        min_r2=0.5,
        back_calculated=BackCalculated(limit_percent=50.0),
        max_unseen_bend=50.0,
    )
    found = run(X, Y, fixed(1, requirements=asked))
    names = [a.requirement for a in found.requirements]
    assert names == [
        "monotonic",
        "max_permissible_error",
        "back_calculated",
        "min_levels",
        "min_r2",
        "max_unseen_bend",
    ]
    assert all(a.met for a in found.requirements)


def test_bad_back_calculated_plans() -> None:
    for bad, pointer in (
        (BackCalculated(limit_percent=0.0), "limit_percent"),
        (BackCalculated(limit_percent=15.0, limit_percent_lowest=10.0), "limit_percent_lowest"),
        (BackCalculated(limit_percent=15.0, min_share=0.0), "min_share"),
    ):
        with pytest.raises(InvalidInput) as raised:
            Plan(requirements=Requirements(back_calculated=bad))
        assert raised.value.errors[0].pointer == f"/requirements/back_calculated/{pointer}"


def test_points_that_have_no_percentage_are_named() -> None:
    """x = 0 in both: nothing is a share of 0, and whoever reads "met" must know that it was not judged."""
    blank = MaxPermissibleError(value=50.0, kind="percent_of_value", of="x")
    assert "1 point has no value to take a percentage of" in answer(Requirements(max_permissible_error=blank)).message
    back = answer(Requirements(back_calculated=BackCalculated(limit_percent=50.0)))
    assert "Blanks (x = 0): 1, not judged" in back.message


def test_places_far_from_zero_are_told_apart() -> None:
    """A frequency standard: ten megahertz and a few hertz."""
    found = run(1e7 + X, Y, fixed(1, requirements=Requirements(max_permissible_error=MaxPermissibleError(value=1.0))))
    monotonic, error = found.requirements
    assert "from 10000000 to 10000008" in monotonic.message
    assert error.worst_x is not None
    assert f"x = {error.worst_x:.0f}" in error.message
