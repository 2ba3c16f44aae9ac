"""Warnings about where the points lie and what they hold."""

import numpy as np

from service.core.basis import grid_over
from service.core.findings import Findings
from service.core.result import Evidence, Warning

COOK_NOTE = 1.0
LEVERAGE_CAUTION = 0.95
GAP_CAUTION = 2.0  # the curve in the gap is twice as uncertain as one reading
OUTSIDE_SHARE = 0.05  # of the range asked for, beyond the outermost points


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
    named = f"Point {point + 1} (x = {found.x_words(found.observations.x[point])})"
    message = (
        f"{named} stands alone: the curve goes through it whatever it reads, so an error there "
        "goes unnoticed into every later value. Repeat that level or add one near it."
        if ruled
        else f"{named} moves the whole curve by more than its uncertainty. Repeat that level."
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
    if asked is not None and found.uncovered > 0:
        lo, hi = found.full.domain
        return Warning(
            code="wide_gap",
            severity="caution" if found.uncovered > OUTSIDE_SHARE else "note",
            message=(
                f"The working range asked for, {found.x_words(asked[0])} to {found.x_words(asked[1])}, goes "
                f"beyond the points, {found.x_words(lo)} to {found.x_words(hi)}. "
                "Everything here holds between the points only; nothing is known beyond them. Add levels at the ends."
            ),
            evidence=Evidence(value=found.uncovered, threshold=OUTSIDE_SHARE),
            method="range of the points against the working range (common practice, no source)",
        )
    here = float(found.gap_ratios[found.degree])
    above = float(found.gap_ratios[min(found.degree + 1, found.gap_ratios.size - 1)])
    if max(here, above) <= GAP_CAUTION:
        return None
    degree = found.degree if here > GAP_CAUTION else found.degree + 1
    low, high = _widest_freedom(found, degree)
    message = (
        f"Between x = {found.x_words(low)} and {found.x_words(high)} no point holds the curve"
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
