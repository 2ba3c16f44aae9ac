"""What the plan allows, on the panel of the unseen bend: lines, or words where they lie far outside.

A bend that is small against what is permitted is what a good calibration has. Drawn to the scale of the limit it would
be a hair's breadth, so from a certain size on the panel keeps to the bend, and the limit is named above it.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.axes import Axes

from service.core.observations import Floats
from service.web.figures.data import FigureData
from service.web.figures.style import LIMIT, shortened

FARTHEST = 6.0  # times the unseen bend: limits beyond it are named, not drawn
MARGIN = 1.15
LINE_HEIGHT = 0.085  # of the panel, for one line of words


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Limit:
    """One thing that the plan allows: `size` in the unit of y at each x of the grid, to either side of the curve."""

    name: str
    gid: str
    size: Floats
    dashes: Any

    @property
    def low(self) -> float:
        """Where it is least."""
        return float(self.size.min())

    @property
    def high(self) -> float:
        """Where it is largest."""
        return float(self.size.max())


def draw(panel: Axes, data: FigureData, largest: float) -> None:
    """Lines and words of every limit, and a vertical range that holds them and the bend."""
    asked = list(_asked(data))
    near = [limit for limit in asked if limit.low <= FARTHEST * largest]
    far = [limit for limit in asked if limit.low > FARTHEST * largest]
    reach = MARGIN * max([largest, *(min(limit.high, FARTHEST * largest) for limit in near)]) or 1.0
    for limit in near:
        _line(panel, data, limit)
    words = "\n".join(_words(limit, data.y_unit) for limit in far)
    share = LINE_HEIGHT * words.count("\n") + 1.5 * LINE_HEIGHT if words else 0.0
    panel.set_ylim(-reach, -reach + 2 * reach / (1 - share))
    if words:
        _say(panel, words)


def _asked(data: FigureData) -> Iterator[Limit]:
    x = data.grid(working=True)
    allowed, bend = data.permitted_at(x), data.plan["requirements"]["max_unseen_bend"]
    if allowed is not None:
        yield Limit(name="max. permissible error", gid="permitted", size=allowed, dashes=(0, (5, 2)))
    if bend is not None:
        size = np.full(x.shape, float(bend))
        yield Limit(name="largest bend allowed", gid="asked", size=size, dashes=(0, (5, 1, 1, 1)))


def _line(panel: Axes, data: FigureData, limit: Limit) -> None:
    x = data.grid(working=True)
    for side, sign in (("low", -1), ("high", 1)):
        panel.plot(
            x,
            sign * limit.size,
            color=LIMIT,
            linestyle=limit.dashes,
            gid=f"{limit.gid}-{side}",
            label=limit.name if sign < 0 else None,
            zorder=3,
        )


def _say(panel: Axes, words: str) -> None:
    """Above the bend; the panel keeps its size whatever the words are."""
    at = panel.transAxes
    said = panel.text(0.02, 0.975, words, va="top", color=LIMIT, fontsize=8.5, transform=at, gid="limits-outside")
    said.set_in_layout(False)


def _words(limit: Limit, y_unit: str) -> str:
    """Two short lines: they must fit the panel of a figure that is 4 inches wide."""
    unit = f" {shortened(y_unit, 10)}" if y_unit else ""
    more = " or more" if limit.high > limit.low * (1 + 1e-9) else ""
    return f"{limit.name}:\n{limit.low:.3g}{unit}{more}, beyond this axis"
