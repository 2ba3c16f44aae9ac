"""The look of the figures: ink on light paper, one accent, shapes before colours; legible at 320 px and in print."""

from collections.abc import Sequence
from typing import Any

from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine

PAPER, PANEL, INK, QUIET, RULE = "#fbfaf6", "#ffffff", "#1d2733", "#5a6572", "#d9d6cc"
ACCENT, BAND, ALARM, LIMIT = "#14596b", "#c5dde0", "#a8321f", "#8a5a00"
SIZE = (4.2, 3.3)  # inches, so that 10 pt text keeps 9 px and more on a screen 320 px wide
MARKERS = ("o", "s", "^", "D", "v", "P", "X", "<", ">", "p")
COLOURS = ("#14596b", "#8a5a00", "#6a4c93", "#2f6b3a", "#a13d63", "#3f5d9b", "#7a4a2b", "#4d4d4d", "#00707a", "#915c00")
MOST_IN_LEGEND = 6

STYLE: dict[Any, Any] = {
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "figure.dpi": 200,
    "axes.facecolor": PANEL,
    "axes.edgecolor": QUIET,
    "axes.linewidth": 0.7,
    "axes.labelcolor": INK,
    "axes.labelsize": 10,
    "axes.titlesize": 10,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.titlecolor": INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.unicode_minus": True,
    "axes.formatter.limits": (-4, 5),
    "xtick.color": QUIET,
    "ytick.color": QUIET,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": 9,
    "ytick.labelsize": 9,
    "font.family": ["DejaVu Sans"],  # shipped with matplotlib: the same on every machine
    "font.size": 9.5,
    "text.color": INK,
    "text.parse_math": False,  # a dollar sign in a caller's label is a dollar sign
    "grid.color": RULE,
    "grid.linewidth": 0.6,
    "legend.frameon": False,
    "legend.fontsize": 9,
    "legend.handlelength": 1.6,
    "lines.linewidth": 1.6,
    "lines.markersize": 5.0,
    "path.simplify": False,
    "svg.fonttype": "path",  # text as outlines: it looks and measures the same wherever it is shown
    "svg.hashsalt": "leastbend",
}


def sheet(title: str, *, rows: Sequence[float] = (1,), size: tuple[float, float] = SIZE) -> tuple[Figure, list[Axes]]:
    """A figure with one column of panels, as high as `rows` say; the title stands over the first."""
    figure = Figure(figsize=size, layout=ConstrainedLayoutEngine(w_pad=0.09, h_pad=0.07))
    panels = figure.subplots(len(rows), 1, squeeze=False, height_ratios=list(rows))[:, 0].tolist()
    panels[0].set_title(shortened(title, 44))
    for number, panel in enumerate(panels):
        panel.set_axisbelow(True)
        panel.grid(visible=True)
        panel.patch.set_gid(f"panel-{number}")
        panel.locator_params(nbins=6)
    return figure, panels


def shortened(text: str, most: int) -> str:
    """No longer than `most`, and without characters that move or hide others."""
    plain = "".join(c if c.isprintable() else " " for c in text)
    return plain if len(plain) <= most else plain[: most - 1] + "…"


def name_axis(panel: Axes, *, x: str | None = None, y: str | None = None) -> None:
    """Labels that fit."""
    if x is not None:
        panel.set_xlabel(shortened(x, 48))
    if y is not None:
        panel.set_ylabel(shortened(y, 34))


def say_nothing_to_show(panel: Axes, words: str) -> None:
    """In place of data that there are not: the reason."""
    panel.set_xticks([])
    panel.set_yticks([])
    panel.text(0.5, 0.5, words, ha="center", va="center", wrap=True, color=QUIET, transform=panel.transAxes)
