"""Warnings about single points and about where the points lie."""

import numpy as np

from service.core.basis import grid_over
from service.core.findings import Findings
from service.core.result import Evidence, Warning

OUTLIER = 0.01
OUTLIER_SERIOUS = 1e-4
PULL_SERIOUS = 1.0  # of the standard deviation of a reading: from there on the curve is wrong by more than scatter
COOK_NOTE = 1.0
LEVERAGE_CAUTION = 0.95
GAP_CAUTION = 2.0  # the curve in the gap is twice as uncertain as one reading
OUTSIDE_SHARE = 0.05  # of the range asked for, beyond the outermost points


def suspect_point(found: Findings) -> Warning | None:
    """A reading far from the curve of the others, or one whose absence changes the choice."""
    aside = tuple(a.point for a in found.choice.walked.aside) if found.plan.rule == "least_bend" else ()
    changed = bool(aside) and found.choice.walked.degree != found.choice.walked.degree_with_all
    largest = found.diagnostics.largest_studentised
    worst = found.diagnostics.largest_studentised_point
    out = largest.p is not None and largest.p < OUTLIER
    if not out and not changed:
        return None
    points = list(aside) if aside else []
    if out and worst is not None and worst not in points:
        points.append(worst)
    named = ", ".join(f"{i + 1} (x = {found.observations.x[i]:g})" for i in points)
    pull = _pull(found, worst) if worst is not None else 0.0
    pulls = largest.p is not None and largest.p < OUTLIER_SERIOUS and pull > PULL_SERIOUS
    serious = changed or pulls
    one = len(points) == 1
    message = f"Point {named} does not" if one else f"Points {named} do not"
    message += " belong with the others"
    if changed:
        walked = found.choice.walked
        message += (
            f"; without {'it' if one else 'them'} the degree is {walked.degree}, with {'it' if one else 'them'} "
            f"{walked.degree_with_all}. The degree was chosen without, but the fitted curve still holds "
            f"{'it' if one else 'them'}. "
        )
    elif pulls:
        where = f"x = {found.observations.x[worst]:g}"
        message += f"; the curve is pulled at {where} by {pull:.1f} times the scatter of the others. "
    else:
        message += ". "
    message += (
        "Check the reading and the standard used; repeat that level. Remove it only for a cause you can write down, "
        "and post the dataset again."
    )
    return Warning(
        code="suspect_point",
        severity="serious" if serious else "caution",
        message=message,
        evidence=Evidence(
            statistic=largest.statistic, df=largest.df, p=largest.p, threshold=OUTLIER, points=tuple(points)
        ),
        method="largest externally studentised residual, Bonferroni p (Cook & Weisberg 1982, 2.2.2)",
    )


def _pull(found: Findings, point: int) -> float:
    """How far a point moves the curve at its place, in standard deviations of a reading as the others show it.

    Cook's distance will not do here: a wild reading inflates the scatter that it is divided by.
    """
    h = min(float(found.full.leverage[point, found.degree]), 1.0)
    t = float(found.studentised[point])
    return abs(t) * h / float(np.sqrt(1 - h))


def point_rules_fit(found: Findings) -> Warning | None:
    """One point alone decides part of the curve."""
    leverage = found.full.leverage[:, found.degree]
    strongest = int(np.argmax(leverage))
    cooks = np.where(np.isnan(found.cooks), -1.0, found.cooks)
    moving = tuple(int(i) for i in np.flatnonzero(cooks > COOK_NOTE))
    ruled = float(leverage[strongest]) > LEVERAGE_CAUTION
    if not ruled and not moving:
        return None
    point = strongest if ruled else int(np.argmax(cooks))
    x = found.observations.x[point]
    message = (
        f"Point {point + 1} (x = {x:g}) stands alone: the curve goes through it whatever it reads, so an error there "
        "goes unnoticed into every later value. Repeat that level or add one near it."
        if ruled
        else f"Point {point + 1} (x = {x:g}) moves the whole curve by more than its uncertainty. Repeat that level."
    )
    return Warning(
        code="point_rules_fit",
        severity="caution" if ruled else "note",
        message=message,
        evidence=Evidence(
            statistic=float(leverage[strongest]) if ruled else float(cooks[point]),
            threshold=LEVERAGE_CAUTION if ruled else COOK_NOTE,
            points=(point,) if ruled else moving,
        ),
        method="leverage" if ruled else "Cook's distance (Cook, Technometrics 19 (1977) 15)",
    )


def few_spare_points(found: Findings) -> Warning | None:
    """Too little left over to judge the fit by."""
    df = found.curve.degrees_of_freedom
    spare_levels = found.observations.levels - found.full.columns(found.degree)
    if df >= 5 and spare_levels >= 2 and found.observations.n > 8:
        return None
    thin = df < 3 or spare_levels < 1
    return Warning(
        code="few_spare_points",
        severity="caution" if thin else "note",
        message=(
            f"{found.observations.n} points at {found.observations.levels} levels leave {df} to spare after degree "
            f"{found.degree}: the scatter, and with it every uncertainty, is known only roughly, and a further bend "
            "could not be seen. Add levels rather than repeats."
        ),
        evidence=Evidence(value=float(df), statistic=float(spare_levels), threshold=3.0),
        method="residual degrees of freedom and levels beyond the number of coefficients (common practice, no source)",
    )


def wide_gap(found: Findings) -> Warning | None:
    """A stretch of the range in which no point holds the curve; or a range asked for beyond the points."""
    method = (
        "root of the largest prediction variance over the range to that of a single reading (variance function of "
        "Box & Hunter, Ann. Math. Stat. 28 (1957) 195)"
    )
    asked = found.plan.working_range
    if asked is not None:
        lo, hi = found.full.domain
        outside = max(lo - asked[0], asked[1] - hi, 0.0)
        if outside > OUTSIDE_SHARE * (asked[1] - asked[0]):
            return Warning(
                code="wide_gap",
                severity="caution",
                message=(
                    f"The working range asked for, {asked[0]:g} to {asked[1]:g}, goes beyond the points, {lo:g} to "
                    f"{hi:g}. Everything here holds between the points only; nothing is known beyond them. Add levels "
                    "at the ends."
                ),
                evidence=Evidence(value=outside, threshold=OUTSIDE_SHARE * (asked[1] - asked[0])),
                method="range of the points against the working range (common practice, no source)",
            )
    here = float(found.gap_ratios[found.degree])
    above = float(found.gap_ratios[min(found.degree + 1, found.gap_ratios.size - 1)])
    if max(here, above) <= GAP_CAUTION:
        return None
    degree = found.degree if here > GAP_CAUTION else found.degree + 1
    low, high = _widest_freedom(found, degree)
    message = (
        f"Between x = {low:g} and {high:g} no point holds the curve"
        + (
            ": there it is less certain than a single reading. "
            if here > GAP_CAUTION
            else "; a further bend there would show late or never. "
        )
        + "Add a level in the gap."
    )
    return Warning(
        code="wide_gap",
        severity="caution" if here > GAP_CAUTION else "note",
        message=message,
        evidence=Evidence(statistic=max(here, above), value=high - low, threshold=GAP_CAUTION),
        method=method,
    )


def _widest_freedom(found: Findings, degree: int) -> tuple[float, float]:
    """The levels on both sides of the place where a degree's prediction variance is largest."""
    fits, level_x = found.full, found.observations.level_x
    shapes = fits.orthonormal_on_grid()[: fits.columns(degree)]
    at = grid_over(fits.domain)[int(np.argmax(np.einsum("ij,ij->j", shapes, shapes)))]
    above = min(max(int(np.searchsorted(level_x, at, side="right")), 1), level_x.size - 1)
    return float(level_x[above - 1]), float(level_x[above])
