"""Points of a dataset on a panel: one shape a series, suspects ringed and numbered."""

from matplotlib.axes import Axes

from service.core.observations import Floats
from service.web.figures.data import FigureData
from service.web.figures.style import ALARM, COLOURS, MARKERS, MOST_IN_LEGEND, PANEL, shortened

MOST_NUMBERED = 4


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


def suspects(panel: Axes, data: FigureData, across: Floats, up: Floats) -> None:
    """Rings, with the number of the point counted from 1, as warnings name it."""
    marked = list(data.suspects)
    if not marked:
        return
    panel.plot(
        across[marked],
        up[marked],
        linestyle="none",
        marker="o",
        markersize=11,
        markerfacecolor="none",
        markeredgecolor=ALARM,
        markeredgewidth=1.5,
        gid="suspects",
        zorder=5,
    )
    panel.margins(x=0.08, y=0.16)  # room for ring and number at the edges
    lo, hi = panel.get_xlim()
    for point in marked[:MOST_NUMBERED]:
        right = across[point] > lo + 0.8 * (hi - lo)
        panel.annotate(
            str(point + 1),
            (across[point], up[point]),
            xytext=(-8 if right else 8, 3),
            textcoords="offset points",
            ha="right" if right else "left",
            color=ALARM,
            fontweight="bold",
            bbox={"facecolor": PANEL, "edgecolor": "none", "alpha": 0.85, "pad": 0.4},
            zorder=6,
        )


def legend(panel: Axes, data: FigureData, *lines: str) -> None:
    """Below the panels: the named lines, and the series where there are several that can be told apart."""
    names = series_names(data)
    drawn = {str(line.get_gid()): line for line in panel.get_lines()}
    shown = [(drawn[gid], str(drawn[gid].get_label())) for gid in lines if gid in drawn]
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
