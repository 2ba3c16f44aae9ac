"""The four verdict words, their reasons, and whether the advice settles what it says it settles."""

import numpy as np
import pytest
from scipy import stats

from service.core.nested import fit_all
from service.core.plan import MaxPermissibleError, Plan, Requirements
from service.core.result import Advice, Result
from tests.core.data import Floats, calibration, fixed, noise, run


def mpe(value: float, of: str = "y", kind: str = "absolute") -> Requirements:
    return Requirements(max_permissible_error=MaxPermissibleError(value=value, of=of, kind=kind))  # type: ignore[arg-type]


def codes(found: Result) -> list[str]:
    return [r.code for r in found.verdict.reasons]


def test_adequate() -> None:
    found = run(*calibration(20, 3, seed=1), Plan(requirements=mpe(0.5)))
    assert found.verdict.verdict == "adequate"
    assert codes(found) == ["nothing_against"]
    assert found.verdict.advice == ()
    assert found.verdict.reasons[0].severity == "note"


def test_conditional_on_a_caution() -> None:
    x, y = calibration(20, 3, seed=1)
    y[0] += 0.25
    found = run(x, y)
    assert found.verdict.verdict == "conditional"
    assert "suspect_point" in codes(found)


def test_inadequate_by_a_requirement() -> None:
    found = run(*calibration(20, 3, seed=1), Plan(requirements=mpe(0.01)))
    assert found.verdict.verdict == "inadequate"
    assert codes(found)[0] == "max_permissible_error_not_met"
    assert found.verdict.reasons[0].severity == "serious"


def test_inadequate_by_a_serious_warning_named_once() -> None:
    x = np.linspace(0, 10, 30)
    found = run(x, x * (8 - x) + 0.1 * noise(30))
    assert found.verdict.verdict == "inadequate"
    assert codes(found).count("not_monotonic") == 1
    assert "monotonic_not_met" not in codes(found)


def test_undecided_by_too_few_spare_points() -> None:
    """Four points, a parabola: one to spare. With the levels advised there are three, and two levels."""
    x = np.array([1.0, 2.0, 4.0, 8.0])
    found = run(x, x + 0.1 * x**2 + 0.01 * noise(4), fixed(2))
    assert found.verdict.verdict == "undecided"
    assert "too_few_spare_points" in codes(found)
    (advice,) = found.verdict.advice
    assert advice.action == "add_levels"
    assert advice.added_readings == len(advice.at_x) == 2
    assert not set(advice.at_x) & set(x.tolist())
    more = np.append(x, advice.at_x)
    settled = run(more, more + 0.1 * more**2 + 0.01 * noise(6), fixed(2))
    assert "too_few_spare_points" not in codes(settled)


def test_inadequate_wins_over_undecided_and_both_are_told() -> None:
    x, y = calibration(6)
    found = run(x, y, fixed(1, requirements=mpe(0.01)))
    assert found.verdict.verdict == "inadequate"
    assert {"max_permissible_error_not_met", "bend_may_hide"} <= set(codes(found))


def median_bend(x: Floats, added: tuple[float, ...], sd: float, degree: int) -> float:
    """Root mean square unseen bend of many repeats of the whole calibration with the readings added."""
    more = np.append(x, added)
    truth = 2 + 3 * more
    bends = [run(more, truth + sd * noise(more.size, seed), fixed(degree)).unseen_bend.y for seed in range(150)]
    return float(np.median([b for b in bends if b is not None]))


@pytest.mark.parametrize(("of", "kind", "value"), [("y", "absolute", 0.11), ("x", "absolute", 0.037)])
def test_advice_settles_the_bend(of: str, kind: str, value: float) -> None:
    """Each design advised, carried out many times: the unseen bend is then as a rule below the MPE."""
    x, sd = np.linspace(1, 10, 7), 0.05
    y = 2 + 3 * x + sd * noise(7, 4)
    found = run(x, y, fixed(1, requirements=mpe(value, of, kind)))
    assert found.verdict.verdict == "undecided"
    assert found.verdict.advice
    limit = value if of == "y" else 3 * value
    scatter = found.curve.residual_sd
    assert scatter is not None
    for advice in found.verdict.advice:
        assert advice.unseen_bend_expected is not None
        assert advice.unseen_bend_expected <= (limit if of == "y" else 1.1 * limit)
        bend = median_bend(x, advice.at_x, scatter, 1)
        assert abs(bend / advice.unseen_bend_expected - 1) < 0.15
        assert bend < 1.1 * limit


def test_advice_is_the_least_of_its_kind() -> None:
    """One reading fewer would not do, by the same reckoning."""
    x = np.linspace(1, 10, 7)
    y = 2 + 3 * x + 0.05 * noise(7, 4)
    found = run(x, y, fixed(1, requirements=mpe(0.11)))
    by_action = {a.action: a for a in found.verdict.advice}
    assert set(by_action) <= {"add_levels", "repeat_end_levels", "repeat_all_levels"}
    assert [a.added_readings for a in found.verdict.advice] == sorted(a.added_readings for a in found.verdict.advice)
    levels = by_action["add_levels"]
    scatter = found.curve.residual_sd
    assert scatter is not None
    assert expected_bend(np.append(x, levels.at_x), scatter) == pytest.approx(levels.unseen_bend_expected, rel=1e-6)
    assert expected_bend(np.append(x, halved(x, levels)), scatter) > 0.11


def halved(x: Floats, advice: Advice) -> Floats:
    """The same way of adding levels, one fewer: the widest gap is halved again and again."""
    places = sorted(x.tolist())
    for _ in range(advice.added_readings - 1):
        gaps = np.diff(places)
        i = int(np.argmax(gaps))
        places.insert(i + 1, (places[i] + places[i + 1]) / 2)
    return np.array(sorted(set(places) - set(x.tolist())))


def expected_bend(x: Floats, sd: float) -> float:
    """Of a straight line: |b| of a half-normal and the t quantile, for terms 2 to 4 (own reckoning)."""
    fits = fit_all(x, np.zeros_like(x), np.ones_like(x), top=4)
    peaks = np.abs(fits.orthonormal_at(np.linspace(x.min(), x.max(), 201))).max(axis=0)
    total = 0.0
    for j in (2, 3, 4):
        bound = sd * (np.sqrt(2 / np.pi) + stats.t.ppf(0.95, x.size - j - 1))
        total += (bound * peaks[j]) ** 2
    return float(np.sqrt(total))


def test_percent_of_value_holds_the_bend_against_the_limit_at_each_level() -> None:
    """A share of the value: tight at the bottom of the range, wide at its top; the profile is what counts."""
    x = np.linspace(1, 100, 30)
    y = 10 * x + 0.2 * noise(30)
    tight = run(x, y, fixed(1, requirements=mpe(3.0, kind="percent_of_value")))
    assert "bend_may_hide" in codes(tight)
    assert tight.verdict.verdict == "undecided"
    loose = run(x, y, fixed(1, requirements=mpe(50.0, kind="percent_of_value")))
    assert "bend_may_hide" not in codes(loose)


def test_a_limit_that_no_small_design_meets_is_said_so() -> None:
    found = run(*calibration(6), fixed(1, requirements=Requirements(max_unseen_bend=1e-6)))
    assert found.verdict.verdict == "undecided"
    assert any("No small number of further readings" in r.message for r in found.verdict.reasons)


@pytest.mark.parametrize("seed", range(5))
def test_readings_that_do_not_depend_on_x_decide_nothing(seed: int) -> None:
    x = np.linspace(0, 10, 11)
    y = 3 + 0.01 * noise(11, seed)
    found = run(x, y)
    assert found.curve.f.p is not None
    if found.curve.f.p <= 0.05:  # as one set in twenty
        return
    assert found.verdict.verdict == "undecided"
    assert "no_dependence" in [reason.code for reason in found.verdict.reasons]
    (monotonic,) = [answer for answer in found.requirements if answer.requirement == "monotonic"]
    assert monotonic.met is None


def test_a_range_beyond_the_points_is_undecided_and_says_where_to_measure() -> None:
    x = np.linspace(0, 10, 12)
    y = 1 + 2 * x + 0.02 * noise(12)
    found = run(x, y, Plan(working_range=(0, 25)))
    assert found.verdict.verdict == "undecided"
    assert "range_not_covered" in [reason.code for reason in found.verdict.reasons]
    assert found.verdict.advice[0].at_x == (25.0,)
    barely = run(x, y, Plan(working_range=(-0.1, 10.1)))
    assert barely.verdict.verdict == "adequate"
    assert "wide_gap" in [w.code for w in barely.warnings if w.severity == "note"]


def test_a_share_of_the_value_is_held_against_the_bend_between_levels_too() -> None:
    """Two clusters of levels: what hides between them hides from a percentage as from an absolute limit."""
    x = np.concatenate((np.linspace(0, 2, 6), np.linspace(8, 10, 6)))
    y = 100 + 0.1 * x + 0.02 * noise(12)
    for kind in ("absolute", "percent_of_value"):
        mpe = MaxPermissibleError(kind=kind, value=0.12, of="y")  # type: ignore[arg-type]
        found = run(x, y, Plan(max_degree=4, requirements=Requirements(max_permissible_error=mpe)))
        assert found.verdict.verdict == "undecided"


def test_a_bend_that_shows_is_not_called_unseen() -> None:
    x = np.linspace(0, 10, 11)
    y = 2 * x + 0.03 * x * x + 0.02 * noise(11)
    mpe = MaxPermissibleError(kind="absolute", value=0.448, of="y")
    found = run(x, y, Plan(max_degree=1, requirements=Requirements(max_permissible_error=mpe)))
    (reason,) = [reason for reason in found.verdict.reasons if reason.code == "bend_may_hide"]
    assert "bend away from the curve" in reason.message
    assert found.verdict.advice == ()


def test_less_confidence_hides_no_bend() -> None:
    x, y = calibration(12)
    bends = [run(x, y, Plan(confidence=c)).unseen_bend.y for c in (0.5, 0.95, 0.99)]
    assert bends[0] == bends[1]
    assert bends[2] is not None
    assert bends[1] is not None
    assert bends[2] > bends[1]


def test_what_is_too_little_says_what_to_add() -> None:
    found = run(np.array([1.0, 2.0, 3.0]), np.array([1.1, 2.0, 3.2]))
    (reason,) = [reason for reason in found.verdict.reasons if reason.code == "too_few_spare_points"]
    assert found.verdict.advice[0].message in reason.message
