"""Points of a dataset on a panel: one shape a series; rings and squares around what warnings name, with its number."""

from collections.abc import Sequence

from matplotlib.axes import Axes

from service.core.observations import Floats
from service.web.figures.data import FigureData
from service.web.figures.style import ALARM, COLOURS, MARKERS, MOST_IN_LEGEND, PANEL, shortened

MOST_NUMBERED = 4
MARKS = {"suspects": "suspect", "swaying": "sways the curve"}


def series_names(data: FigureData) -> list[str]:
    """Labels of the series in the order in which they first appear; one empty name without series."""
    return [""] if data.series is None else list(dict.fromkeys(data.series))


def points(panel: Axes, data: FigureData, across: Floats, up: Floats) -> None:
    """Every drawn point at (across, up), both of shape (n,)."""
    labels = data.series
    for number, name in enumerate(series_names(data)):
        mine = [i for i in data.drawn.tolist() if labels is None or labels[i] == name]
        mine = [i for i in mine if up[i] == up[i]]
        panel.plot(
            across[mine],
            up[mine],
            linestyle="none",
            marker=MARKERS[number % len(MARKERS)],
            markersize=4.6 if len(data.drawn) <= 200 else 2.6,
            markerfacecolor="white" if (number + number // len(MARKERS)) % 2 else COLOURS[number % len(COLOURS)],
            markeredgecolor=COLOURS[number % len(COLOURS)],
            markeredgewidth=1.0,
            gid=f"points-{number}",
            zorder=4,
        )


def named(panel: Axes, data: FigureData, across: Floats, up: Floats) -> None:
    """Rings around suspects, squares around points that sway the curve, each with its number counted from 1."""
    _around(panel, across, up, data.suspects, gid="suspects", marker="o", size=11)
    _around(panel, across, up, data.swaying, gid="swaying", marker="s", size=13)
    marked = sorted({*data.suspects, *data.swaying})
    if marked:
        _numbers(panel, across, up, marked)


def _around(
    panel: Axes, across: Floats, up: Floats, marked: Sequence[int], *, gid: str, marker: str, size: float
) -> None:
    if not marked:
        return
    panel.plot(
        across[list(marked)],
        up[list(marked)],
        linestyle="none",
        marker=marker,
        markersize=size,
        markerfacecolor="none",
        markeredgecolor=ALARM,
        markeredgewidth=1.5,
        gid=gid,
        label=MARKS[gid],
        zorder=5,
    )


def _numbers(panel: Axes, across: Floats, up: Floats, marked: Sequence[int]) -> None:
    panel.margins(x=0.08, y=0.16)  # room for ring and number at the edges
    lo, hi = panel.get_xlim()
    for point in marked[:MOST_NUMBERED]:
        right = across[point] > lo + 0.8 * (hi - lo)
        panel.annotate(
            str(point + 1),
            (across[point], up[point]),
            xytext=(-9 if right else 9, 3),
            textcoords="offset points",
            ha="right" if right else "left",
            color=ALARM,
            fontweight="bold",
            bbox={"facecolor": PANEL, "edgecolor": "none", "alpha": 0.85, "pad": 0.4},
            zorder=6,
        )


def legend(panel: Axes, data: FigureData, *lines: str) -> None:
    """Below the panels: the named lines, the marks, and the series where there are several to be told apart."""
    names = series_names(data)
    drawn = {str(line.get_gid()): line for line in panel.get_lines()}
    shown = [(drawn[gid], str(drawn[gid].get_label())) for gid in (*lines, *MARKS) if gid in drawn]
    if len(names) > 1:
        some = names[:MOST_IN_LEGEND]
        shown += [(drawn[f"points-{number}"], shortened(name, 16)) for number, name in enumerate(some)]
    if not shown:
        return
    figure = panel.get_figure(root=True)
    assert figure is not None
    figure.legend(
        [line for line, _ in shown],
        [name for _, name in shown],
        title=None if len(names) <= MOST_IN_LEGEND else f"first {MOST_IN_LEGEND} of {len(names)} series",
        loc="outside lower center",
        ncols=2 if lines else 3,
    )
