"""`normal`, `spread` and `leverage`: the residuals by what each could be expected to be."""

from typing import Any

import numpy as np
from matplotlib.figure import Figure
from scipy import special

from service.core.observations import Floats
from service.web.figures import marks
from service.web.figures.data import FigureData
from service.web.figures.style import ACCENT, BAND, LIMIT, QUIET, name_axis, say_nothing_to_show, sheet

NONE = "no studentised residual\ncan be computed"
GROUPS = 6
EXPECTED_ROOT = 0.8222  # mean of the root of |z| for a standard normal z: 2^(1/4) Gamma(3/4) / sqrt(pi)
COOK_CONTOURS = (0.5, 1.0)


def normal(data: FigureData) -> Figure:
    """Ordered studentised residuals against the quantiles expected of them, with a pointwise 95 % band.

    The i-th of n ordered uniform values is Beta(i, n + 1 - i); plotting positions of Blom (1958). The band takes the
    residuals as independent, which they nearly are where points are many more than coefficients.
    """
    figure, (panel,) = sheet(f"{data.subject}: normal quantiles")
    known = np.flatnonzero(~np.isnan(data.studentised))
    if known.size < 3:
        say_nothing_to_show(panel, NONE)
        return figure
    order = known[np.argsort(data.studentised[known], kind="stable")]
    n = order.size
    rank = np.arange(1, n + 1, dtype=np.float64)
    expected, low, high = (
        _quantile(data, p)
        for p in (
            (rank - 0.375) / (n + 0.25),
            special.betaincinv(rank, n + 1 - rank, 0.025),
            special.betaincinv(rank, n + 1 - rank, 0.975),
        )
    )
    panel.fill_between(expected, low, high, color=BAND, linewidth=0, gid="band", zorder=2)
    ends = expected[[0, -1]]
    panel.plot(ends, ends, color=ACCENT, linewidth=1.2, gid="expected", zorder=3)
    at = np.full(data.x.shape, np.nan)
    at[order] = expected
    value = np.where(np.isnan(data.studentised), np.nan, data.studentised)
    marks.points(panel, data, at, value)
    marks.named(panel, data, at, value)
    kind = "normal" if data.known_uncertainty else f"t quantile, {data.df - 1} df"
    name_axis(panel, x=f"expected ({kind})", y="studentised residual")
    marks.legend(panel, data)
    return figure


def spread(data: FigureData) -> Figure:
    """Root of the absolute standardised residual against the fitted value; level where the spread is even."""
    figure, (panel,) = sheet(f"{data.subject}: spread of the readings")
    root = np.sqrt(np.abs(standardised(data)))
    known = np.flatnonzero(~np.isnan(root))
    if known.size < 3:
        say_nothing_to_show(panel, NONE)
        return figure
    panel.axhline(EXPECTED_ROOT, color=QUIET, linestyle=(0, (1.2, 1.6)), gid="even", label="even spread", zorder=2)
    marks.points(panel, data, data.fitted, root)
    marks.named(panel, data, data.fitted, root)
    across, up = group_means(data.fitted[known], root[known])
    panel.plot(across, up, color=LIMIT, linewidth=1.6, gid="group-means", label="mean of neighbours", zorder=3)
    panel.set_ylim(bottom=0)
    unit = f" ({data.y_unit})" if data.y_unit else ""
    name_axis(panel, x=f"fitted value{unit}", y="√|standardised residual|")
    marks.legend(panel, data, "even", "group-means")
    return figure


def leverage(data: FigureData) -> Figure:
    """Studentised residual against leverage, with lines of equal Cook's distance."""
    figure, (panel,) = sheet(f"{data.subject}: leverage")
    known = ~np.isnan(data.studentised)
    if not known.any():
        say_nothing_to_show(panel, NONE)
        return figure
    value = np.where(known, data.studentised, np.nan)
    panel.axhline(0, color=ACCENT, linewidth=1.2, gid="zero", zorder=2)
    marks.points(panel, data, data.leverage, value)
    largest = float(np.nanmax(np.abs(value)))
    right = min(1.0, 1.25 * float(data.leverage[known].max()))
    marks.named(panel, data, data.leverage, value)
    panel.set_xlim(0, 1.04 * right)  # room for marks around a leverage of 1
    panel.set_ylim(-1.25 * max(largest, 2.0), 1.25 * max(largest, 2.0))
    h = np.linspace(right / 400, min(right, 0.999), 400)
    for number, distance in enumerate(COOK_CONTOURS):
        line = contour(data, h, distance)
        for sign in (-1, 1):
            panel.plot(
                h,
                sign * line,
                color=LIMIT,
                linestyle=(0, (5, 2)) if number else (0, (1.2, 1.6)),
                linewidth=1.1,
                gid=f"cook-{number}-{'low' if sign < 0 else 'high'}",
                label=f"Cook's distance {distance:g}" if sign > 0 else None,
                zorder=2,
            )
    name_axis(panel, x="leverage", y="studentised residual")
    marks.legend(panel, data, "cook-0-high", "cook-1-high")
    return figure


def standardised(data: FigureData) -> Floats:
    """Internally studentised residuals from the external ones: r^2 = t^2 df / (df - 1 + t^2).

    Cook & Weisberg, Residuals and Influence in Regression, 1982, 2.2.1. Where u_y is absolute they are one.
    """
    t = data.studentised
    if data.known_uncertainty:
        return t
    return np.asarray(np.sign(t) * np.sqrt(t * t * data.df / (data.df - 1 + t * t)))


def contour(data: FigureData, h: Floats, distance: float) -> Floats:
    """The studentised residual at which Cook's distance is `distance` at leverage h; NaN where none is so large."""
    square = distance * data.parameters * (1 - h) / h
    if data.known_uncertainty:
        return np.asarray(np.sqrt(square))
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(np.where(square < data.df, np.sqrt(square * (data.df - 1) / (data.df - square)), np.nan))


def group_means(across: Floats, up: Floats) -> tuple[Floats, Floats]:
    """Means of up to six groups of neighbours, equally many in each."""
    order = np.argsort(across, kind="stable")
    groups = np.array_split(order, min(GROUPS, max(1, order.size // 3)))
    return np.array([across[g].mean() for g in groups]), np.array([up[g].mean() for g in groups])


def _quantile(data: FigureData, p: Any) -> Floats:
    if data.known_uncertainty or data.df < 2:
        return np.asarray(special.ndtri(p))
    return np.asarray(special.stdtrit(data.df - 1, p))
