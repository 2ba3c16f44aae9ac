"""The warning about readings that do not belong with the others."""

import numpy as np

from service.core.checks.levels import CAUTION, NOTE
from service.core.findings import Findings
from service.core.nested import NestedFits
from service.core.outliers import Outliers, find_outliers, with_step
from service.core.result import Evidence, Severity, Warning
from service.core.screen import farthest, outlier_p, studentised

OUTLIER = 0.01
OUTLIER_SERIOUS = 1e-4
FAR = 6.0  # times the median size of a residual, some four standard deviations: nearer, none of several is wild
BEYOND = 1e4  # times the scatter: a number would only say that the others hardly scatter
PULL_SERIOUS = 1.0  # of the standard deviation of a reading: from there on the curve is wrong by more than scatter


def suspect_point(found: Findings) -> Warning | None:
    """Readings far from the curve of the others, one or several, or whose absence changes the choice."""
    walked = found.choice.walked
    aside = tuple(a.point for a in walked.aside) if found.plan.rule == "least_bend" else ()
    least = found.plan.min_degree
    without, with_all = max(walked.degree, least), max(walked.degree_with_all, least)
    changed = bool(aside) and without != with_all
    one = _farthest(found)
    several = _several(found, one)
    if one is None and several is None and not changed:
        return None
    points = list(dict.fromkeys([*aside, *(several.points if several else ()), *(one[:1] if one else ())]))
    named = ", ".join(f"{i + 1} (x = {found.x_words(found.observations.x[i])})" for i in points)
    alone = len(points) == 1
    message = (
        f"Point {named} does not belong with the others" if alone else f"Points {named} do not belong with the others"
    )
    it = "it" if alone else "them"
    pull = _pull(found, one, several)
    bends = found.diagnostics.next_terms.p is not None and found.diagnostics.next_terms.p < CAUTION
    severity: Severity = "caution"
    if changed:
        severity = "serious"
        message += (
            f"; without {it} the degree is {without}, with {it} {with_all}. The degree was chosen without, but the "
            f"fitted curve still holds {it}. "
        )
    elif pull is not None:
        severity = "caution" if bends else "serious"
        by = f"by up to {pull:.3g} times the scatter of the others" if pull < BEYOND else "far beyond their scatter"
        message += f"; the curve is pulled {by}. "
    else:
        message += ". "
    if bends:
        message += (
            "The curve does not follow the readings elsewhere either (curvature_left), so it may be the curve that is "
            "wrong there. "
        )
    message += (
        "Check the reading and the standard used; repeat that level. Remove it only for a cause you can write down, "
        "and post the dataset again."
    )
    largest = found.diagnostics.largest_studentised
    return Warning(
        code="suspect_point",
        severity=severity,
        message=message,
        evidence=Evidence(
            statistic=one[1] if one else largest.statistic,
            df=largest.df,
            p=one[2] if one else (several.p if several else largest.p),
            threshold=OUTLIER,
            points=tuple(points),
        ),
        method="largest externally studentised residual, Bonferroni p (Cook & Weisberg 1982, 2.2.2)"
        + ("; several together by Rosner's procedure (Technometrics 25 (1983) 165)" if several else ""),
    )


def _farthest(found: Findings) -> tuple[int, float, float] | None:
    """The farthest point, its studentised residual and p, if it is too far; scatter is no less than steps make."""
    largest, worst = found.diagnostics.largest_studentised, found.diagnostics.largest_studentised_point
    if worst is None or largest.p is None or largest.p >= OUTLIER:
        return None
    known = _believed(found)
    if known == found.plan.known_uncertainty and found.diagnostics.resolution is None:
        return worst, float(largest.statistic or 0.0), largest.p
    fits = _stepped(found)
    t = studentised(fits, found.degree, known_uncertainty=known)
    place = farthest(t)
    if place is None:
        return None
    p = outlier_p(float(t[place]), fits, found.degree, known_uncertainty=known)
    return (place, float(t[place]), p) if p < OUTLIER else None


def _several(found: Findings, one: tuple[int, float, float] | None) -> Outliers | None:
    """Looked for only where something shows: a far point, or residuals that are not normal, as several make them."""
    normal = found.diagnostics.normality.p
    if _believed(found) or found.exact or (one is None and (normal is None or normal >= NOTE)):
        return None
    size = np.abs(found.full.residuals[:, found.degree])
    if one is None and size.max() < FAR * float(np.median(size)):
        return None
    several = find_outliers(found.full, found.degree, step=_step(found))
    return several if several is not None and len(several.points) > 1 else None


def _pull(found: Findings, one: tuple[int, float, float] | None, several: Outliers | None) -> float | None:
    """How far the points move the curve, in standard deviations of a reading as the others show it, where that is much.

    Cook's distance will not do here: a wild reading inflates the scatter that it is divided by.
    """
    pull, p = 0.0, 1.0
    if one is not None:
        point, t, p = one
        h = min(float(found.full.leverage[point, found.degree]), 1.0)
        pull = abs(t) * h / float(np.sqrt(1 - h))
    if several is not None:
        pull, p = max(pull, several.shift), min(p, several.p)
    return pull if p < OUTLIER_SERIOUS and pull > PULL_SERIOUS else None


def _believed(found: Findings) -> bool:
    """Whether readings are held against their stated uncertainties: only while their scatter does not belie these."""
    test = found.diagnostics.consistency
    belied = test.p is not None and test.p < CAUTION and (test.statistic or 0.0) > (test.df or (0.0,))[0]
    return found.plan.known_uncertainty and not belied


def _step(found: Findings) -> float | None:
    equal = bool((found.full.weights == found.full.weights[0]).all())
    return found.diagnostics.resolution if equal else None


def _stepped(found: Findings) -> NestedFits:
    return with_step(found.full, _step(found))
