"""The diagnostics of the chosen fit, in one record."""

import numpy as np

from service.core.nested import NestedFits
from service.core.observations import Floats, Observations
from service.core.residual_tests import (
    breusch_pagan,
    consistency,
    next_terms,
    normality,
    reset,
    serial_correlation,
    series_difference,
)
from service.core.resolution import resolution
from service.core.result import Diagnostics, Points, Statistic
from service.core.screen import farthest, outlier_p

MOST_POINTS_LISTED = 2000


def cooks_distance(fits: NestedFits, degree: int) -> Floats:
    """Cook's distance (Cook, Technometrics 19 (1977) 15): (n,), NaN where undefined."""
    h, e = fits.leverage[:, degree], fits.residuals[:, degree]
    c, df = fits.columns(degree), fits.df(degree)
    if df < 1 or c < 1 or fits.rss[degree] <= fits.rounding_rss:
        return np.full(e.shape, np.nan)
    with np.errstate(divide="ignore", invalid="ignore"):
        spare = np.where(h < 1 - 1e-10, 1 - h, np.nan)
        return np.asarray(e * e * h / (spare * spare * c * (float(fits.rss[degree]) / df)))


def diagnose(
    observations: Observations,
    fits: NestedFits,
    degree: int,
    *,
    studentised: Floats,
    cooks: Floats,
    gap_ratio: float,
    absolute: bool,
    known_uncertainty: bool,
) -> Diagnostics:
    """Run every check on one degree. `fits` reach above it as far as the data allow."""
    outlier, worst = _largest(fits, degree, studentised, known_uncertainty)
    points, reason = None, None
    if fits.n <= MOST_POINTS_LISTED:
        residual = fits.residuals[:, degree] / np.sqrt(fits.weights)
        points = Points(
            fitted=tuple((observations.y - residual).tolist()),
            residual=tuple(residual.tolist()),
            leverage=tuple(np.minimum(fits.leverage[:, degree], 1.0).tolist()),
            studentised=_or_none(studentised),
            cooks_distance=_or_none(cooks),
        )
    else:
        reason = f"left out above {MOST_POINTS_LISTED} points; they follow from the curve and the dataset"
    return Diagnostics(
        breusch_pagan=breusch_pagan(fits, degree),
        durbin_watson_measured=serial_correlation(fits, degree, None),
        durbin_watson_by_x=serial_correlation(fits, degree, np.argsort(observations.x, kind="stable")),
        reset=reset(fits, degree),
        normality=normality(fits, degree),
        largest_studentised=outlier,
        largest_studentised_point=worst,
        next_terms=next_terms(fits, degree),
        series=series_difference(observations, fits, degree),
        consistency=consistency(fits, degree, absolute=absolute),
        largest_gap_ratio=gap_ratio,
        resolution=resolution(observations.y),
        points=points,
        points_reason=reason,
    )


def _or_none(values: Floats) -> tuple[float | None, ...]:
    return tuple(None if v != v else v for v in values.tolist())


def _largest(
    fits: NestedFits, degree: int, studentised: Floats, known_uncertainty: bool
) -> tuple[Statistic, int | None]:
    method = "largest externally studentised residual, Bonferroni p (Cook & Weisberg 1982, 2.2.2)"
    worst = farthest(studentised)
    if worst is None:
        reason = "no studentised residual can be computed"
        return Statistic(statistic=None, df=None, p=None, method=method, reason=reason), None
    value = float(studentised[worst])
    p = outlier_p(value, fits, degree, known_uncertainty=known_uncertainty)
    df = None if known_uncertainty else (float(fits.df(degree) - 1),)
    return Statistic(statistic=value, df=df, p=p, method=method), worst
