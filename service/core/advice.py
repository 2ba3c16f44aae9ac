"""What would settle an undecided verdict: the least further readings, among a small set of designs, computed."""

import math
from collections.abc import Iterator

import numpy as np

from service.core.bend_limit import BendLimit
from service.core.findings import Findings
from service.core.nested import fit_all
from service.core.observations import Floats
from service.core.result import Advice
from service.core.tails import t_quantile, z_quantile
from service.core.unseen import TERMS

MOST_REPEATS = 20
MOST_NEW_LEVELS = 40
MEAN_OF_HALF_NORMAL = math.sqrt(2 / math.pi)  # of |b| in sd when no further term exists


def settle_bend(found: Findings, limit: BendLimit) -> list[Advice]:
    """Designs that bring the expected unseen bend under the limit, fewest readings first; empty if none does.

    Expected: with the present scatter, and no further bend there (mean |b| of a half-normal).
    """
    best: dict[str, Advice] = {}
    for action, added in _designs(found):
        if action in best:
            continue
        ratio = _expected_ratio(found, limit, added)
        if ratio is None or ratio > 1:
            continue
        allowed = float(limit.allowed.min())
        if action == "repeat_all_levels":
            times = added.size // found.observations.levels
            what = f"Repeat every level {times} more time{'s' if times > 1 else ''} ({added.size} readings)"
        elif action == "repeat_end_levels":
            times = added.size // 2
            each = "once more" if times == 1 else f"{times} more times"
            what = f"Repeat the lowest and the highest level {each} ({added.size} readings)"
        else:
            places = ", ".join(f"{found.x_words(v)}" for v in added)
            what = f"Add one reading at each of {added.size} new levels: x = {places}"
        best[action] = Advice(
            action=action,
            added_readings=int(added.size),
            at_x=tuple(added.tolist()),
            unseen_bend_expected=None if limit.pointwise else ratio * allowed,
            message=f"{what}: the unseen bend is then expected to be {ratio:.0%} of {limit.words}, if no bend shows.",
        )
    return sorted(best.values(), key=lambda a: a.added_readings)


def settle_spare_points(found: Findings) -> Advice:
    """The levels to add so that two levels and three points are spare at the chosen degree."""
    columns = found.full.columns(found.degree)
    o = found.observations
    missing = max(columns + 2 - o.levels, columns + 3 - o.n, 1)
    new = _new_levels(o.level_x, missing)
    places = ", ".join(f"{found.x_words(v)}" for v in new)
    return Advice(
        action="add_levels",
        added_readings=missing,
        at_x=tuple(new.tolist()),
        unseen_bend_expected=None,
        message=(
            f"Add one reading at each of {missing} new levels, x = {places}: then two levels and three points are "
            f"spare at degree {found.degree}, enough to judge the fit by."
        ),
    )


def settle_range(found: Findings) -> Advice:
    """Levels at those ends of the working range asked for that the points do not reach."""
    asked, (lo, hi) = found.plan.working_range or found.full.domain, found.full.domain
    ends = [end for end, beyond in ((asked[0], asked[0] < lo), (asked[1], asked[1] > hi)) if beyond]
    places = " and ".join(f"{found.x_words(end)}" for end in ends)
    return Advice(
        action="add_levels",
        added_readings=len(ends),
        at_x=tuple(ends),
        unseen_bend_expected=None,
        message=f"Add a level at x = {places}, and levels between there and the points, or ask for the range measured.",
    )


def _designs(found: Findings) -> Iterator[tuple[str, Floats]]:
    levels = found.observations.level_x
    for k in range(1, MOST_NEW_LEVELS + 1):
        yield "add_levels", _new_levels(levels, k)
    for m in range(1, MOST_REPEATS + 1):
        yield "repeat_end_levels", np.repeat(levels[[0, -1]], m)
    for m in range(1, MOST_REPEATS + 1):
        yield "repeat_all_levels", np.tile(levels, m)


def _new_levels(levels: Floats, count: int) -> Floats:
    """Halve the widest gap, again and again."""
    places = list(levels)
    new: list[float] = []
    for _ in range(count):
        i = int(np.argmax(np.diff(places)))
        middle = (places[i] + places[i + 1]) / 2
        places.insert(i + 1, middle)
        new.append(middle)
    return np.sort(np.array(new))


def _expected_ratio(found: Findings, limit: BendLimit, added: Floats) -> float | None:
    fits, degree = found.full, found.degree
    x = np.concatenate((fits.x, added))
    # a new reading is taken to be as good as those of the nearest point
    nearest = np.abs(added[:, None] - fits.x[None, :]).argmin(axis=1)
    weights = np.concatenate((fits.weights, fits.weights[nearest]))
    intercept = fits.intercept
    spare = 2 if intercept else 1
    top = min(degree + TERMS, np.unique(x).size - (1 if intercept else 0), x.size - spare)
    design = fit_all(x, np.zeros_like(x), weights, top=top, intercept=intercept)
    terms = range(degree + 1, min(degree + TERMS, design.top) + 1)
    if not terms:
        return None
    absolute, confidence = found.plan.known_uncertainty, found.plan.bend_confidence
    sigma = 1.0 if absolute else float(np.sqrt(fits.rss[degree] / max(1, fits.df(degree))))
    bounds = [
        sigma * (MEAN_OF_HALF_NORMAL + (z_quantile(confidence) if absolute else t_quantile(confidence, design.df(j))))
        for j in terms
    ]
    return limit.ratio(design, design.columns(degree), np.array(bounds))
