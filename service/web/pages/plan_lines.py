"""A plan line by line, for people: each line is words and pointers, so that pages and report print the same numbers."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from service.web.pages import words

SCHEMES = {
    "k_fold": "folds of points",
    "leave_one_out": "single points, each in turn",
    "leave_level_out": "levels, each in turn",
    "leave_series_out": "series, each in turn",
}
KINDS = {"absolute": "", "percent_of_value": " % of value", "percent_of_span": " % of span"}


@dataclass(frozen=True, slots=True)
class At:
    """A number of the job's document, by its pointer."""

    pointer: str


@dataclass(frozen=True, slots=True)
class PlanLine:
    """What is asked, and how: words and numbers in the order in which they are read."""

    name: str
    parts: tuple[str | At, ...]


def plan_lines(plan: dict[str, Any], *, x_unit: str, y_unit: str) -> list[PlanLine]:
    """Every field of a plan but those that ask nothing. `plan`: as the API answers it, with its defaults."""
    units = {"x": f" {x_unit}" if x_unit else "", "y": f" {y_unit}" if y_unit else ""}
    return [*_fit(plan, units), *_resampling(plan), *_requirements(plan["requirements"], units)]


def _fit(plan: dict[str, Any], units: dict[str, str]) -> Iterator[PlanLine]:
    yield PlanLine("Degrees tried", (At("/plan/min_degree"), " to ", At("/plan/max_degree")))
    yield PlanLine("Rule", (words.RULES.get(plan["rule"], plan["rule"]),))
    yield PlanLine("Weights", (plan["weights"],))
    if not plan["intercept"]:
        yield PlanLine("Intercept", ("none: the curve goes through the origin",))
    if plan["known_uncertainty"]:
        yield PlanLine("Stated uncertainty", ("taken as absolute",))
    if plan["working_range"] is not None:
        ends = At("/plan/working_range/0"), At("/plan/working_range/1")
        yield PlanLine("Working range", (ends[0], " to ", ends[1], units["x"]))
    yield PlanLine("Confidence", (At("/plan/confidence"),))


def _resampling(plan: dict[str, Any]) -> Iterator[PlanLine]:
    scheme = plan["resampling"]["scheme"]
    parts: tuple[str | At, ...] = (SCHEMES.get(scheme, scheme),)
    if scheme == "k_fold":
        asked = [At(f"/plan/resampling/{name}") for name in ("folds", "repeats", "seed")]
        parts = (asked[0], " folds of points, dealt ", asked[1], " times, seed ", asked[2])
    yield PlanLine("Left out in turn", parts)


def _requirements(asked: dict[str, Any], units: dict[str, str]) -> Iterator[PlanLine]:
    below = "/plan/requirements"
    permitted, calculated = asked["max_permissible_error"], asked["back_calculated"]
    if permitted is not None:
        of = permitted["of"]
        kind = KINDS[permitted["kind"]] or units[of]
        value = At(f"{below}/max_permissible_error/value")
        yield PlanLine("Maximum permissible error", (value, kind, f", in {of}"))
    if asked["max_unseen_bend"] is not None:
        yield PlanLine("Largest unseen bend", (At(f"{below}/max_unseen_bend"), units["y"]))
    yield PlanLine("Monotonic", ("required" if asked["monotonic"] else "not required",))
    if asked["min_levels"] is not None:
        yield PlanLine("Least number of levels", (At(f"{below}/min_levels"),))
    if asked["min_r2"] is not None:
        yield PlanLine("Least R-squared", (At(f"{below}/min_r2"),))
    if calculated is not None:
        within: tuple[str | At, ...] = (At(f"{below}/back_calculated/limit_percent"), " %")
        if calculated["limit_percent_lowest"] is not None:
            within += (", at the lowest level ", At(f"{below}/back_calculated/limit_percent_lowest"), " %")
        share = At(f"{below}/back_calculated/min_share")
        yield PlanLine("Back-calculated x", ("within ", *within, ", for a share of ", share, " of the points"))
