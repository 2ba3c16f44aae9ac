"""Several wild points at once, which mask each other in the scatter that each is held against.

Rosner's generalised many-outlier procedure (Technometrics 25 (1983) 165), on the residuals of a curve: take away the
farthest point again and again, and count back to the last one that stood out when it was taken.
"""

import math
from dataclasses import dataclass, replace

import numpy as np

from service.core.curve import value_at
from service.core.nested import NestedFits, fit_all
from service.core.screen import farthest, outlier_p, studentised

ALPHA = 0.01  # of each step, Bonferroni over the points left
MOST = 10
LEAST_SPARE = 6  # degrees of freedom, below which several wild points and the curve cannot be told apart


@dataclass(frozen=True, kw_only=True, slots=True)
class Outliers:
    """The points that stand out together. shift: how far they move the curve, in SD of a reading of the others."""

    points: tuple[int, ...]
    p: float
    shift: float


def with_step(fits: NestedFits, step: float | None) -> NestedFits:
    """The same fits, in which the others never scatter less than readings that come in steps must (step/sqrt(12))."""
    if step is None:
        return fits
    return replace(fits, rounding_rss=max(fits.rounding_rss, float(fits.weights.sum()) * step * step / 12))


def find_outliers(fits: NestedFits, degree: int, *, step: float | None) -> Outliers | None:
    """At most a fifth of the points and ten; None where none stand out. step: that the readings come in."""
    kept = np.arange(fits.n)
    current = with_step(fits, step)
    taken: list[int] = []
    p_values: list[float] = []
    cleaned: list[NestedFits] = []
    for _ in range(min(MOST, fits.n // 5)):
        t = studentised(current, degree)
        place = farthest(t)
        spare_levels = np.unique(current.x).size - fits.columns(degree)
        if place is None or spare_levels < 2 or current.df(degree) - 1 < LEAST_SPARE:
            break
        p_values.append(outlier_p(float(t[place]), current, degree))
        taken.append(int(kept[place]))
        keep = np.delete(np.arange(current.n), place)
        kept = kept[keep]
        x = current.x[keep]
        refit = fit_all(x, current.y[keep], current.weights[keep], top=degree, intercept=fits.intercept)
        current = with_step(refit, step)
        if current.top < degree:
            break
        cleaned.append(current)
    last = max((i for i, p in enumerate(p_values) if p < ALPHA and i < len(cleaned)), default=-1)
    if last < 0:
        return None
    without = cleaned[last]
    sd = float(np.sqrt(max(without.rss[degree], without.rounding_rss) / without.df(degree)))
    moved = value_at(fits.chebyshev(degree), fits.domain, fits.x) - value_at(
        without.chebyshev(degree), without.domain, fits.x
    )
    moved_by = float(np.max(np.abs(moved) * np.sqrt(fits.weights)))
    shift = moved_by / sd if sd > 0 else math.inf
    return Outliers(points=tuple(taken[: last + 1]), p=p_values[last], shift=shift)
