"""The plan's requirements, each answered: asked, found, where it is worst, met or not."""

from dataclasses import asdict

import numpy as np
from numpy.polynomial import chebyshev

from service.core.curve import derivative, to_t, value_at
from service.core.findings import Findings
from service.core.observations import Floats
from service.core.plan import BackCalculated, MaxPermissibleError
from service.core.result import RequirementAnswer, Unit

NEWTON_ROUNDS = 50


def answer_requirements(found: Findings) -> list[RequirementAnswer]:
    """Every requirement that the plan makes, in a fixed order."""
    asked = found.plan.requirements
    answers: list[RequirementAnswer] = []
    if asked.monotonic:
        answers.append(_monotonic(found))
    if asked.max_permissible_error is not None:
        answers.append(_permissible_error(found, asked.max_permissible_error))
    if asked.back_calculated is not None:
        answers.append(_back_calculated(found, asked.back_calculated))
    if asked.min_levels is not None:
        levels = found.observations.levels
        met = levels >= asked.min_levels
        message = f"The dataset has {levels} levels; at least {asked.min_levels} are asked for."
        answers.append(_plain("min_levels", asked.min_levels, float(levels), "levels", met, message))
    if asked.min_r2 is not None:
        answers.append(_min_r2(found, asked.min_r2))
    if asked.max_unseen_bend is not None:
        answers.append(_max_unseen_bend(found, asked.max_unseen_bend))
    return answers


def _min_r2(found: Findings, asked: float) -> RequirementAnswer:
    r2 = found.curve.r2
    if r2 is None:
        return _plain("min_r2", asked, None, "none", None, "R-squared has no value, since y is constant.")
    message = f"R-squared is {r2:.8g}; at least {asked:g} is asked for. It says little about bend."
    return _plain("min_r2", asked, r2, "none", r2 >= asked, message)


def _max_unseen_bend(found: Findings, asked: float) -> RequirementAnswer:
    """Met or not known, never failed: a bend that could hide is not a bend that is there."""
    bend = found.unseen.bend.y
    if bend is None:
        message = "The data can estimate no further term, so the unseen bend has no bound."
        return _plain("max_unseen_bend", asked, None, "y", None, message)
    message = f"A bend of up to {bend:.4g} could hide in these data; at most {asked:g} is allowed."
    return _plain("max_unseen_bend", asked, bend, "y", True if bend <= asked else None, message)


def _plain(
    name: str, asked: float, found: float | None, unit: Unit, met: bool | None, message: str
) -> RequirementAnswer:
    return RequirementAnswer(
        requirement=name,
        asked={"value": asked},
        found=found,
        unit=unit,
        worst_point=None,
        worst_x=None,
        met=met,
        message=message,
    )


def _monotonic(found: Findings) -> RequirementAnswer:
    least, greatest, at = found.slope
    word = "rises" if greatest > 0 else "falls"
    lo, hi = found.working_range
    met: bool | None = found.monotonic
    if found.monotonic and found.no_dependence:
        met = None
        message = "The readings do not show whether the curve rises or falls: its slope may as well be 0."
    elif found.monotonic:
        message = f"The curve {word} throughout, from {found.x_words(lo)} to {found.x_words(hi)}."
    else:
        message = (
            f"The curve turns or is flat between {found.x_words(lo)} and {found.x_words(hi)} (slope {least:.4g} to "
            f"{greatest:.4g}), so one reading can mean more than one value."
        )
    return RequirementAnswer(
        requirement="monotonic",
        asked={"value": True},
        found=min(abs(least), abs(greatest)) if found.monotonic else 0.0,
        unit="none",
        worst_point=None,
        worst_x=at,
        met=met,
        message=message,
    )


def back_calculate(found: Findings) -> Floats:
    """x that the chosen curve gives for each reading, by Newton's method from the nominal x; NaN where none.

    Defined for monotonic curves. A reading that noise carries past the end of the range is followed a
    little beyond it, a tenth of the range at most.
    """
    o, (lo, hi) = found.observations, found.full.domain
    first = derivative(found.coefficients) * (2 / (hi - lo))
    x = o.x.copy()
    reach = 0.1 * (hi - lo)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        for _ in range(NEWTON_ROUNDS):
            step = (value_at(found.coefficients, found.full.domain, x) - o.y) / chebyshev.chebval(
                to_t(x, found.full.domain), first
            )
            x = np.clip(x - step, lo - reach, hi + reach)
            if np.all(np.abs(step) <= 1e-14 * (np.abs(x) + (hi - lo))):
                break
        left = np.abs(value_at(found.coefficients, found.full.domain, x) - o.y)
        scale = np.abs(o.y).max() * 1e-9
        return np.where(left <= scale, x, np.nan)


def allowed_error(asked: MaxPermissibleError, found: Findings, at_x: Floats) -> Floats:
    """The permissible error at each x in the unit of what it is of (y or x); NaN where what it is a share of is 0."""
    value = asked.value
    if asked.kind == "absolute":
        return np.full(at_x.shape, value)
    y = value_at(found.coefficients, found.full.domain, at_x)
    if asked.kind == "percent_of_span":
        lo, hi = found.working_range
        ends = value_at(found.coefficients, found.full.domain, np.array([lo, hi]))
        span = hi - lo if asked.of == "x" else abs(float(ends[1] - ends[0]))
        return np.full(at_x.shape, value / 100 * span if span > 0 else np.nan)
    size = np.abs(at_x if asked.of == "x" else y)
    return np.where(size > 0, value / 100 * size, np.nan)


def _permissible_error(found: Findings, asked: MaxPermissibleError) -> RequirementAnswer:
    o = found.observations
    name = "max_permissible_error"
    unit: Unit = "percent" if asked.kind != "absolute" else asked.of
    if asked.of == "x" and not found.monotonic:
        message = "The error in x has no value, because the curve is not monotonic and x cannot be found from y."
        return _answer(name, asdict(asked), None, unit, None, None, False, message)
    if asked.of == "x":
        error = back_calculate(found) - o.x
    else:
        error = o.y - value_at(found.coefficients, found.full.domain, o.x)
    allowed = np.where(found.in_range, allowed_error(asked, found, o.x), np.nan)
    ratio = np.where(np.isnan(allowed), -np.inf, np.where(np.isnan(error), np.inf, np.abs(error) / allowed))
    worst = int(np.argmax(ratio))
    if ratio[worst] == -np.inf:
        message = "No point in the working range has a value of which a percentage could be taken."
        return _answer(name, asdict(asked), None, unit, None, None, None, message)
    if ratio[worst] == np.inf:
        message = f"The reading of point {worst + 1} lies beyond what the curve reaches; its x cannot be found."
        return _answer(name, asdict(asked), None, unit, worst, float(o.x[worst]), False, message)
    largest = float(ratio[worst]) * asked.value
    what = {"percent_of_value": "% of value", "percent_of_span": "% of span"}.get(asked.kind, f"in {asked.of}")
    met = bool(ratio[worst] <= 1)
    message = (
        f"The largest error of a calibration point is {largest:.4g} {what} (point {worst + 1}, "
        f"x = {found.x_words(o.x[worst])}); {asked.value:g} is allowed."
    )
    if left_out := int(np.isnan(allowed[found.in_range]).sum()):
        points = "1 point has" if left_out == 1 else f"{left_out} points have"
        message += f" {points} no value to take a percentage of, and {'is' if left_out == 1 else 'are'} not judged."
    return _answer(name, asdict(asked), largest, unit, worst, float(o.x[worst]), met, message)


def _back_calculated(found: Findings, asked: BackCalculated) -> RequirementAnswer:
    o = found.observations
    name = "back_calculated"
    if not found.monotonic:
        message = "Nothing can be back-calculated, because the curve is not monotonic."
        return _answer(name, asdict(asked), None, "share", None, None, False, message)
    usable = found.in_range & (o.x != 0)
    if not usable.any():
        message = "No point in the working range has an x other than 0."
        return _answer(name, asdict(asked), None, "share", None, None, None, message)
    with np.errstate(divide="ignore", invalid="ignore"):
        percent = np.where(usable, 100 * np.abs(back_calculate(found) / o.x - 1), np.nan)
    nonzero = found.observations.level_x[found.observations.level_x != 0]
    lowest_level = nonzero[np.argmin(np.abs(nonzero))]
    at_lowest = o.level == int(np.flatnonzero(o.level_x == lowest_level)[0])
    wider = asked.limit_percent if asked.limit_percent_lowest is None else asked.limit_percent_lowest
    limit = np.where(at_lowest, wider, asked.limit_percent)
    ratio = np.where(usable, np.where(np.isnan(percent), np.inf, percent / limit), -np.inf)
    share = float(np.mean(ratio[usable] <= 1))
    worst = int(np.argmax(ratio))
    shown = f"{percent[worst]:.4g} %" if np.isfinite(ratio[worst]) else "no value"
    message = (
        f"{share:.1%} of the points come back within their limit ({asked.limit_percent:g} %, lowest level "
        f"{wider:g} %); {asked.min_share:.1%} are asked for. Worst: point {worst + 1}, {shown}."
    )
    if left_out := int((found.in_range & (o.x == 0)).sum()):
        message += f" Blanks (x = 0): {left_out}, not judged."
    met = share >= asked.min_share
    return _answer(name, asdict(asked), share, "share", worst, float(o.x[worst]), met, message)


def _answer(
    name: str,
    asked: dict[str, object],
    found: float | None,
    unit: Unit,
    worst: int | None,
    worst_x: float | None,
    met: bool | None,
    message: str,
) -> RequirementAnswer:
    return RequirementAnswer(
        requirement=name,
        asked=asked,
        found=found,
        unit=unit,
        worst_point=worst,
        worst_x=worst_x,
        met=met,
        message=message,
    )
