"""What the figures show, gathered from a job's documents and its dataset. numpy only: alt texts need no matplotlib."""

import json
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.polynomial import chebyshev

from service.core.curve import derivative, to_t, value_at
from service.core.diagnose import cooks_distance
from service.core.nested import fit_all
from service.core.observations import Floats, Integers
from service.core.screen import studentised
from service.core.tails import t_quantile, z_quantile
from service.core.weighting import power_weights
from service.store.records import DatasetContent

MOST_DRAWN = 2000
"""Points drawn of one dataset; of more, those that stand out and an even choice of the rest."""
GRID = 301


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class FigureData:
    """One job for the figures.

    x, y, fitted, residual, leverage, studentised, cooks, weights: shape (n,), in the order measured; NaN where
    undefined; residual = y - fitted in the unit of y. `drawn`: indices of the points that are drawn, ascending.
    `suspects`: points that do not belong with the others; `swaying`: points that decide or move the curve alone, which
    need not be suspect; both as warnings name them. Plan and result are the documents that the API answers.
    """

    subject: str
    x_label: str
    y_label: str
    x_unit: str
    y_unit: str
    x: Floats
    y: Floats
    series: tuple[str, ...] | None
    weights: Floats
    fitted: Floats
    residual: Floats
    leverage: Floats
    studentised: Floats
    cooks: Floats
    drawn: Integers
    suspects: tuple[int, ...]
    swaying: tuple[int, ...]
    plan: dict[str, Any]
    result: dict[str, Any]

    @property
    def degree(self) -> int:
        """The chosen degree."""
        return int(self.result["chosen_degree"])

    @property
    def df(self) -> int:
        """Residual degrees of freedom."""
        return int(self.result["curve"]["degrees_of_freedom"])

    @property
    def parameters(self) -> int:
        """Coefficients fitted."""
        return self.x.size - self.df

    @property
    def domain(self) -> tuple[float, float]:
        """Lowest and highest x of the data."""
        lo, hi = self.result["curve"]["domain"]
        return float(lo), float(hi)

    @property
    def working_range(self) -> tuple[float, float]:
        """Where the curve may be used."""
        lo, hi = self.result["working_range"]
        return float(lo), float(hi)

    @property
    def known_uncertainty(self) -> bool:
        """Whether u_y was taken as absolute: normal instead of t quantiles."""
        return bool(self.plan["known_uncertainty"])

    def curve_at(self, x: Floats) -> Floats:
        """The chosen curve."""
        return value_at(np.array(self.result["curve"]["coefficients"]), self.domain, x)

    def slope_at(self, x: Floats) -> Floats:
        """dy/dx of the chosen curve."""
        return _slope(self.result["curve"], x)

    def half_width_at(self, x: Floats) -> Floats | None:
        """Half the coverage interval of the curve at x, at the plan's confidence; None without spare points.

        Law of propagation of uncertainty (GUM, JCGM 100:2008, 5.2.2) from the covariance of the coefficients.
        """
        covariance, factor = self.result["curve"]["covariance"], self.coverage_factor
        if covariance is None or factor is None:
            return None
        basis = chebyshev.chebvander(to_t(x, self.domain), len(covariance) - 1)
        variance = np.einsum("ij,jk,ik->i", basis, np.array(covariance), basis)
        return np.asarray(factor * np.sqrt(np.maximum(variance, 0.0)))

    @property
    def coverage_factor(self) -> float | None:
        """Two-sided factor of the plan's confidence: Student's t, or normal where u_y is absolute."""
        upper = (1 + float(self.plan["confidence"])) / 2
        if self.known_uncertainty:
            return z_quantile(upper)
        return t_quantile(upper, self.df) if self.df > 0 else None

    def grid(self, *, working: bool = False) -> Floats:
        """Even x over the data, or over the working range."""
        lo, hi = self.working_range if working else self.domain
        return np.linspace(lo, hi, GRID)

    def bend_at(self, x: Floats) -> Floats | None:
        """The unseen bend's profile: root of the sum of squares of the bounded terms at x; None without a bound."""
        terms = self.result["unseen_bend"]["terms"]
        if not terms:
            return None
        intercept = bool(self.plan["intercept"])
        fits = fit_all(self.x, self.y, self.weights, top=terms[-1]["degree"], intercept=intercept)
        columns = [fits.columns(term["degree"]) - 1 for term in terms]
        bounds = np.array([term["upper_bound"] for term in terms])
        return np.asarray(np.sqrt(np.sum((fits.orthonormal_at(x)[:, columns] * bounds) ** 2, axis=1)))

    def permitted_at(self, x: Floats) -> Floats | None:
        """The plan's maximum permissible error in the unit of y; None if it asks none or it has no value in y.

        An error permitted in x counts as its change of y on the chosen curve.
        """
        asked = self.plan["requirements"]["max_permissible_error"]
        if asked is None:
            return None
        value, of_x = float(asked["value"]), asked["of"] == "x"
        lo, hi = self.working_range
        if asked["kind"] == "absolute":
            allowed = np.full(x.shape, value)
        elif asked["kind"] == "percent_of_span":
            ends = self.curve_at(np.array([lo, hi]))
            span = hi - lo if of_x else abs(float(ends[1] - ends[0]))
            allowed = np.full(x.shape, value / 100 * span)
        else:
            allowed = value / 100 * np.abs(x if of_x else self.curve_at(x))
        return np.asarray(allowed * np.abs(self.slope_at(x))) if of_x else allowed


def figure_data(content: DatasetContent, *, subject: str, plan: str, result: str) -> FigureData:
    """Gather what the figures need from the documents as stored."""
    asked, found = json.loads(plan), json.loads(result)
    weights = _weights(content, found)
    listed = found["diagnostics"]["points"]
    if listed is not None:
        columns = {name: _floats(listed[name]) for name in ("fitted", "residual", "leverage", "studentised")}
        columns["cooks"] = _floats(listed["cooks_distance"])
    else:
        columns = _columns(content, weights, asked, found)
    suspects, swaying = _named(found, "suspect_point"), _named(found, "point_rules_fit")
    details = content.details
    return FigureData(
        subject=subject,
        x_label=_label(details, "x"),
        y_label=_label(details, "y"),
        x_unit=details.get("x_unit") or "",
        y_unit=details.get("y_unit") or "",
        x=content.x,
        y=content.y,
        series=content.series,
        weights=weights,
        drawn=_drawn(columns["residual"], {*suspects, *swaying}),
        suspects=suspects,
        swaying=swaying,
        plan=asked,
        result=found,
        **columns,
    )


def _label(details: dict[str, Any], axis: str) -> str:
    quantity, unit = details.get(f"{axis}_quantity") or axis, details.get(f"{axis}_unit")
    return f"{quantity} ({unit})" if unit else str(quantity)


def _named(found: dict[str, Any], code: str) -> tuple[int, ...]:
    lists = [one["evidence"]["points"] for one in found["warnings"] if one["code"] == code]
    return tuple(sorted({int(point) for points in lists for point in points}))


def _weights(content: DatasetContent, found: dict[str, Any]) -> Floats:
    used = found["weights"]["used"]
    if not used.startswith("u_y") or content.u_y is None:
        return power_weights(content.x, used)
    variance = content.u_y**2
    if used != "u_y" and content.u_x is not None:
        variance = variance + (_slope(found["curve"], content.x) * content.u_x) ** 2
    return np.asarray(1.0 / variance)


def _columns(
    content: DatasetContent, weights: Floats, asked: dict[str, Any], found: dict[str, Any]
) -> dict[str, Floats]:
    """The diagnostics of each point, which a result of very many points leaves out."""
    degree = int(found["chosen_degree"])
    fits = fit_all(content.x, content.y, weights, top=degree, intercept=bool(asked["intercept"]))
    fitted = value_at(np.array(found["curve"]["coefficients"]), tuple(found["curve"]["domain"]), content.x)
    return {
        "fitted": fitted,
        "residual": content.y - fitted,
        "leverage": np.minimum(fits.leverage[:, degree], 1.0),
        "studentised": studentised(fits, degree, known_uncertainty=bool(asked["known_uncertainty"])),
        "cooks": cooks_distance(fits, degree),
    }


def _slope(curve: dict[str, Any], x: Floats) -> Floats:
    lo, hi = curve["domain"]
    slope = derivative(np.array(curve["coefficients"], dtype=np.float64)) * (2 / (hi - lo))
    return np.asarray(chebyshev.chebval(to_t(x, (lo, hi)), slope))


def _drawn(residual: Floats, named: set[int]) -> Integers:
    n = residual.size
    if n <= MOST_DRAWN:
        return np.arange(n)
    largest = np.argsort(-np.abs(residual), kind="stable")[: MOST_DRAWN // 4]
    even = np.linspace(0, n - 1, MOST_DRAWN - largest.size - len(named)).astype(np.intp)
    return np.unique(np.concatenate([largest, even, np.array(sorted(named), dtype=np.intp)]))


def _floats(values: list[float | None]) -> Floats:
    return np.array([np.nan if v is None else v for v in values], dtype=np.float64)
