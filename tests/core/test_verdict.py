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
