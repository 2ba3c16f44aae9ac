"""What each figure shows, in words with numbers: the alternative text of the image and the description in the SVG."""

from collections.abc import Callable

import numpy as np

from service.web.figures.data import FigureData
from service.web.figures.names import FigureName


def alt_text(name: FigureName, data: FigureData) -> str:
    """One to four sentences."""
    return "".join(c if c.isprintable() else " " for c in WORDS[name](data))


def _curve(data: FigureData) -> str:
    lo, hi = data.domain
    half = data.half_width_at(data.grid())
    band = (
        f" The {_percent(data)} coverage band of the curve is at most ±{half.max():.3g}{_unit(data)} wide."
        if half is not None
        else " There are too few points for a coverage band."
    )
    return (
        f"{data.x.size} points of {data.y_label} against {data.x_label} from {lo:.6g} to {hi:.6g}, and the chosen curve"
        f" of degree {data.degree}.{band} Below, the residuals: the largest is {_largest(data)}."
        f"{_marked(data)}{_thinned(data)}"
    )


def _degrees(data: FigureData) -> str:
    errors = [
        f"{one['cv']['rmse_mean']:.3g} at degree {one['degree']}"
        for one in data.result["candidates"]
        if one["cv"]["rmse_mean"] is not None
    ]
    rules = [
        f"{rule['rule'].replace('_', ' ')} {rule['degree'] if rule['degree'] is not None else 'none'}"
        for rule in data.result["decision"]["rules"]
    ]
    said = f"Cross-validation error{_in_unit(data)}: {', '.join(errors)}." if errors else "No degree cross-validated."
    return f"{said} Degree {data.degree} is chosen. What each rule would choose: {', '.join(rules)}."


def _residuals(data: FigureData) -> str:
    return (
        f"Residuals of degree {data.degree} against {data.x_label} and against the order measured. Their standard"
        f" deviation is {_number(data.result['curve']['residual_sd'])}{_unit(data)}; the largest is {_largest(data)}."
        f"{_series(data)}{_marked(data)}"
    )


def _normal(data: FigureData) -> str:
    found = data.result["diagnostics"]["normality"]
    test = f" {found['method']}: p {found['p']:.2g}." if found["p"] is not None else ""
    known = data.studentised[~np.isnan(data.studentised)]
    if known.size < 3:
        return "No studentised residual can be computed, so there is nothing to compare with normal quantiles."
    return (
        f"{known.size} studentised residuals from {known.min():.3g} to {known.max():.3g} against the quantiles expected"
        f" of normal errors, with the band that holds 95 % of each.{test}{_marked(data)}"
    )


def _spread(data: FigureData) -> str:
    found = data.result["diagnostics"]["breusch_pagan"]
    test = f" Breusch-Pagan test: p {found['p']:.2g}." if found["p"] is not None else ""
    if np.isnan(data.studentised).all():
        return "No standardised residual can be computed, so their spread cannot be shown."
    return (
        f"Root of the absolute standardised residual against the fitted value from {data.fitted.min():.4g} to"
        f" {data.fitted.max():.4g}{_unit(data)}, with the means of neighbours; even spread is a level line.{test}"
    )


def _leverage(data: FigureData) -> str:
    if np.isnan(data.cooks).all():
        return "No studentised residual can be computed, so leverage has nothing to be held against."
    point = int(np.nanargmax(data.cooks))
    return (
        f"Studentised residual against leverage, which reaches {data.leverage.max():.3g}, with lines of Cook's distance"
        f" 0.5 and 1. The largest Cook's distance is {data.cooks[point]:.3g}, of point {point + 1}.{_marked(data)}"
    )


def _unseen(data: FigureData) -> str:
    largest = data.result["unseen_bend"]["y"]
    if largest is None:
        return f"No bound on the unseen bend: {data.result['unseen_bend']['reason']}."
    lo, hi = data.working_range
    permitted = data.permitted_at(data.grid(working=True))
    against = " The plan permits no particular error." if permitted is None else f" {_permitted(data, permitted)}"
    return (
        f"The bend that could hide in these data at each x from {lo:.6g} to {hi:.6g}; its bound, the unseen bend, is"
        f" {largest:.3g}{_unit(data)}.{against}"
    )


def _permitted(data: FigureData, permitted: np.ndarray[tuple[int, ...], np.dtype[np.float64]]) -> str:
    low, high = float(permitted.min()), float(permitted.max())
    size = f"{low:.3g}" if high - low <= 1e-9 * high else f"{low:.3g} to {high:.3g}"
    return f"The maximum permissible error is {size}{_unit(data)}."


def _largest(data: FigureData) -> str:
    point = int(np.argmax(np.abs(data.residual)))
    return f"{data.residual[point]:.3g}{_unit(data)} at point {point + 1} (x = {data.x[point]:.6g})"


def _series(data: FigureData) -> str:
    if data.series is None:
        return ""
    names = list(dict.fromkeys(data.series))
    if len(names) > 8:
        return f" {len(names)} series are told apart by shape."
    return f" Series, told apart by shape: {', '.join(names)}."


def _thinned(data: FigureData) -> str:
    if data.drawn.size == data.x.size:
        return ""
    return f" Drawn are {data.drawn.size} of the points: those farthest from the curve, and an even choice of the rest."


def _marked(data: FigureData) -> str:
    return _list("Ringed as suspect", data.suspects) + _list("In a square, swaying the curve", data.swaying)


def _list(why: str, points: tuple[int, ...]) -> str:
    if not points:
        return ""
    named = ", ".join(str(point + 1) for point in points[:10])
    return f" {why}: point{'s' if len(points) > 1 else ''} {named}{' and more' if len(points) > 10 else ''}."


def _percent(data: FigureData) -> str:
    return f"{100 * float(data.plan['confidence']):g} %"


def _unit(data: FigureData) -> str:
    return f" {data.y_unit}" if data.y_unit else ""


def _in_unit(data: FigureData) -> str:
    return f" in {data.y_unit}" if data.y_unit else ""


def _number(value: float | None) -> str:
    return "not known" if value is None else f"{value:.3g}"


WORDS: dict[FigureName, Callable[[FigureData], str]] = {
    "curve": _curve,
    "degrees": _degrees,
    "residuals": _residuals,
    "normal": _normal,
    "spread": _spread,
    "leverage": _leverage,
    "unseen": _unseen,
}
