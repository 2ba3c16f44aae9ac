"""`degrees`: what each degree would err, and which degree each rule would choose."""

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, NullFormatter, NullLocator

from service.web.figures.data import FigureData
from service.web.figures.style import ACCENT, BAND, INK, PANEL, QUIET, SIZE, name_axis, say_nothing_to_show, sheet

RULES = {
    "least_bend": "least bend",
    "lowest_cv": "lowest CV",
    "one_standard_error": "one SE",
    "aicc": "AICc",
    "bic": "BIC",
}
LOGARITHMIC_FROM = 8.0  # largest over smallest error


def degrees(data: FigureData) -> Figure:
    """Cross-validation error by degree with its spread over the folds; below, the choice of every rule."""
    title = f"{data.subject}: degree {data.degree} chosen"
    figure, (above, below) = sheet(title, rows=(2.2, 1.3), size=(SIZE[0], SIZE[1] + 0.7))
    tried = [one for one in data.result["candidates"] if one["cv"]["rmse_mean"] is not None]
    every = [one["degree"] for one in data.result["candidates"]]
    if not tried:
        say_nothing_to_show(above, "no degree can be cross-validated\non these data")
    else:
        _errors(above, data, tried)
    _choices(below, data)
    margin = 0.5 if len(every) > 2 else 1.5
    for panel in (above, below):
        if panel is below or tried:
            panel.set_xlim(min(every) - margin, max(every) + margin)
            panel.set_xticks(every)
            panel.axvspan(data.degree - 0.32, data.degree + 0.32, color=BAND, alpha=0.6, linewidth=0, zorder=0)
    unit = f" ({data.y_unit})" if data.y_unit else ""
    name_axis(above, y=f"CV error{unit}")
    name_axis(below, x="degree")
    return figure


def _errors(panel: Axes, data: FigureData, tried: list[dict[str, object]]) -> None:
    degree = np.array([one["degree"] for one in tried], dtype=np.float64)
    mean = np.array([one["cv"]["rmse_mean"] for one in tried])  # type: ignore[index]
    sd = np.array([one["cv"]["rmse_sd"] or 0.0 for one in tried])  # type: ignore[index]
    logarithmic = bool(mean.min() > 0 and mean.max() > LOGARITHMIC_FROM * mean.min())
    low = np.maximum(mean - sd, mean / 10 if logarithmic else 0.0)
    panel.vlines(degree, low, mean + sd, color=QUIET, linewidth=1.2, gid="spread", zorder=2)
    panel.plot(
        degree,
        mean,
        color=ACCENT,
        marker="o",
        markerfacecolor=PANEL,
        markersize=5.5,
        linewidth=0.9,
        gid="errors",
        zorder=3,
    )
    chosen = degree == data.degree
    panel.plot(
        degree[chosen], mean[chosen], linestyle="none", marker="o", markersize=9, color=ACCENT, gid="chosen", zorder=4
    )
    if not logarithmic:
        panel.set_ylim(bottom=0)
        return
    panel.set_yscale("log")
    decades = np.log10((mean + sd).max() / low.min())
    panel.yaxis.set_major_locator(
        LogLocator(subs=(1.0,) if decades > 2.5 else (1.0, 3.0) if decades > 1.3 else (1, 2, 5))
    )
    panel.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:.3g}"))
    panel.yaxis.set_minor_locator(NullLocator())
    panel.yaxis.set_minor_formatter(NullFormatter())


def _choices(panel: Axes, data: FigureData) -> None:
    rules = data.result["decision"]["rules"]
    used = data.result["decision"]["rule"]
    rows = list(range(len(rules) - 1, -1, -1))
    found = [
        (one["degree"], row, one["rule"]) for one, row in zip(rules, rows, strict=True) if one["degree"] is not None
    ]
    panel.plot(
        [degree for degree, _, _ in found],
        [row for _, row, _ in found],
        linestyle="none",
        marker="D",
        markersize=6,
        markerfacecolor=PANEL,
        markeredgecolor=INK,
        gid="rules",
        zorder=3,
    )
    panel.plot(
        [degree for degree, _, rule in found if rule == used],
        [row for _, row, rule in found if rule == used],
        linestyle="none",
        marker="D",
        markersize=6,
        color=ACCENT,
        gid="rule-used",
        zorder=4,
    )
    panel.set_yticks(rows, [RULES.get(one["rule"], one["rule"]) for one in rules])
    panel.set_ylim(-0.6, len(rules) - 0.4)
    panel.tick_params(axis="y", length=0)
