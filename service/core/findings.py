"""Everything found about the chosen fit, in one place, for the warnings, requirements and verdict."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.core.choice import Choice
from service.core.cross_validation import HeldOut
from service.core.nested import NestedFits
from service.core.observations import Floats, Observations
from service.core.plan import Plan
from service.core.result import Curve, Diagnostics, Test
from service.core.unseen import Unseen
from service.core.weighting import Weighted

NO_DEPENDENCE = 0.05  # p of the whole curve, above which nothing shows that y depends on x


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Findings:
    """What the analysis knows when it comes to judge.

    full: fits as high as the data allow (three terms above the plan's limit at most); tried: the same
    up to the plan's limit. studentised, cooks: at the chosen degree, NaN where undefined.
    gap_ratios: by degree, one above the chosen at least where the data allow.
    coefficients: of the chosen curve on T_j; slope: least, greatest and x of the flattest place.
    """

    observations: Observations
    plan: Plan
    working_range: tuple[float, float]
    weighted: Weighted
    full: NestedFits
    tried: NestedFits
    held: HeldOut
    choice: Choice
    curve: Curve
    coefficients: Floats
    monotonic: bool
    slope: tuple[float, float, float]
    diagnostics: Diagnostics
    studentised: Floats
    cooks: Floats
    lack_of_fit: Sequence[Test | None]
    unseen: Unseen
    gap_ratios: Floats

    @property
    def degree(self) -> int:
        """The chosen degree."""
        return self.choice.degree

    @property
    def exact(self) -> bool:
        """Whether the residuals of the chosen fit are at the level of rounding."""
        return bool(self.full.rss[self.degree] <= self.full.rounding_rss)

    @property
    def least_slope(self) -> float | None:
        """Smallest |dy/dx| in the working range; None where the curve is not monotonic."""
        return min(abs(self.slope[0]), abs(self.slope[1])) if self.monotonic else None

    def x_words(self, x: float) -> str:
        """An x as messages show it: with as many digits as tell the points of this range apart."""
        lo, hi = self.full.domain
        far = min(max(abs(lo), abs(hi)) / (hi - lo), 1e11)
        return f"{x:.{6 + max(0, math.floor(math.log10(far)))}g}"

    @property
    def no_dependence(self) -> bool:
        """Whether the curve explains no more than chance: then y may not depend on x at all."""
        p, spare = self.curve.f.p, self.curve.degrees_of_freedom
        return self.degree > 0 and spare >= 2 and p is not None and p > NO_DEPENDENCE

    @property
    def uncovered(self) -> float:
        """How far the working range asked for goes beyond the points, as a share of it."""
        asked = self.plan.working_range
        if asked is None:
            return 0.0
        lo, hi = self.full.domain
        return max(lo - asked[0], asked[1] - hi, 0.0) / (asked[1] - asked[0])

    @property
    def in_range(self) -> np.ndarray[tuple[int], np.dtype[np.bool_]]:
        """Which points lie in the working range."""
        x, (lo, hi) = self.observations.x, self.working_range
        return np.asarray((x >= lo) & (x <= hi))
