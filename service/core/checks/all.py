"""All warnings on one set of findings, the most severe first."""

from collections.abc import Callable

from service.core.checks import choice, curve, points, scatter, suspects
from service.core.findings import Findings
from service.core.result import Warning

CHECKS: tuple[Callable[[Findings], Warning | None], ...] = (
    suspects.suspect_point,
    curve.curvature_left,
    curve.not_monotonic,
    scatter.spread_changes,
    scatter.series_differ,
    scatter.neighbours_correlated,
    scatter.uncertainty_inconsistent,
    choice.rules_disagree,
    choice.unstable_choice,
    curve.degree_at_limit,
    points.few_spare_points,
    points.wide_gap,
    points.point_rules_fit,
    scatter.resolution_coarse,
    scatter.weights_guessed,
    choice.fold_inestimable,
    scatter.not_normal,
    curve.noise_at_rounding,
    curve.bend_may_hide,
    curve.power_terms_look_insignificant,
)
ORDER = {"serious": 0, "caution": 1, "note": 2}


def all_warnings(found: Findings) -> list[Warning]:
    """Every warning that applies, serious ones first, otherwise in the order of CHECKS."""
    raised = [w for w in (check(found) for check in CHECKS) if w is not None]
    return sorted(raised, key=lambda w: ORDER[w.severity])
