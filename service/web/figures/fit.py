"""`curve`, `residuals` and `unseen`: the fit in the units of the data."""

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from service.web.figures import limits, marks
from service.web.figures.data import FigureData
from service.web.figures.style import ACCENT, BAND, LIMIT, QUIET, SIZE, name_axis, say_nothing_to_show, sheet


def curve(data: FigureData) -> Figure:
    """Points and chosen curve with its coverage band; below, the same band about zero with the residuals."""
    figure, (above, below) = sheet(
        f"{data.subject}: degree {data.degree}", rows=(2.6, 1.2), size=(SIZE[0], SIZE[1] + 0.7)
    )
    x = data.grid()
    y, half = data.curve_at(x), data.half_width_at(x)
    _working_range(above, data)
    _working_range(below, data)
    if half is not None:
        above.fill_between(x, y - half, y + half, color=BAND, linewidth=0, gid="band", zorder=2)
        below.fill_between(x, -half, half, color=BAND, linewidth=0, gid="residual-band", zorder=2)
    above.plot(x, y, color=ACCENT, gid="curve", zorder=3)
    below.axhline(0, color=ACCENT, linewidth=1.2, gid="zero", zorder=3)
    marks.points(above, data, data.x, data.y)
    marks.points(below, data, data.x, data.residual)
    marks.named(above, data, data.x, data.y)
    marks.named(below, data, data.x, data.residual)
    below.set_xlim(above.get_xlim())
    above.tick_params(labelbottom=False)
    below.locator_params(axis="y", nbins=3)
    name_axis(above, y=data.y_label)
    name_axis(below, x=data.x_label, y="residual")
    figure.align_ylabels()
    marks.legend(above, data)
    return figure


def residuals(data: FigureData) -> Figure:
    """Residuals against x and against the order measured."""
    figure, (above, below) = sheet(
        f"{data.subject}: residuals of degree {data.degree}", rows=(1, 1), size=(SIZE[0], SIZE[1] + 0.7)
    )
    order = np.arange(1, data.x.size + 1, dtype=np.float64)
    for panel, across in ((above, data.x), (below, order)):
        panel.axhline(0, color=ACCENT, linewidth=1.2, gid="zero" if panel is above else "zero-by-order", zorder=3)
        marks.points(panel, data, across, data.residual)
        marks.named(panel, data, across, data.residual)
        panel.locator_params(axis="y", nbins=4)
    below.locator_params(axis="x", integer=True)
    unit = f" ({data.y_unit})" if data.y_unit else ""
    name_axis(above, x=data.x_label, y=f"residual{unit}")
    name_axis(below, x="order measured", y=f"residual{unit}")
    marks.legend(above, data)
    return figure


def unseen(data: FigureData) -> Figure:
    """The bend that could hide, to either side of the chosen curve, against the largest and the permitted error."""
    figure, (panel,) = sheet(f"{data.subject}: bend that could hide")
    x = data.grid(working=True)
    profile, largest = data.bend_at(x), data.result["unseen_bend"]["y"]
    if profile is None or largest is None:
        say_nothing_to_show(panel, "no bound: the data can estimate\nno term above the chosen degree")
        return figure
    panel.fill_between(x, -profile, profile, color=BAND, linewidth=0, gid="bend", label="could hide at x", zorder=2)
    panel.axhline(0, color=ACCENT, linewidth=1.2, gid="chosen", label="chosen curve", zorder=3)
    for sign in (-1, 1):
        panel.axhline(
            sign * largest,
            color=QUIET,
            linestyle=(0, (1.2, 1.6)),
            gid="largest-low" if sign < 0 else "largest-high",
            label="unseen bend" if sign < 0 else None,
            zorder=3,
        )
    limits.draw(panel, data, largest)
    unit = f" ({data.y_unit})" if data.y_unit else ""
    name_axis(panel, x=data.x_label, y=f"error in {'y' if not unit else 'reading'}{unit}")
    figure.legend(loc="outside lower center", ncols=2)
    return figure


def _working_range(panel: Axes, data: FigureData) -> None:
    if data.working_range == data.domain:
        return
    for number, end in enumerate(data.working_range):
        panel.axvline(end, color=LIMIT, linestyle=(0, (5, 2)), linewidth=1, gid=f"working-range-{number}", zorder=1)
