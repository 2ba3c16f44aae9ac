"""The whole analysis of one dataset under one plan, composed."""

from collections.abc import Callable

import numpy as np

from service.core.candidates import describe_candidates
from service.core.check import check
from service.core.checks.all import all_warnings
from service.core.choice import choose
from service.core.criteria import criteria
from service.core.cross_validation import cross_validate
from service.core.curve import describe_curve, is_monotonic, slope_range
from service.core.diagnose import cooks_distance, diagnose
from service.core.findings import Findings
from service.core.folds import make_folds
from service.core.judgement import judge
from service.core.lack_of_fit import lack_of_fit
from service.core.least_bend import gap_ratios
from service.core.nested import highest_estimable
from service.core.observations import Observations
from service.core.plan import Plan
from service.core.requirements import answer_requirements
from service.core.result import Result
from service.core.screen import studentised
from service.core.unseen import TERMS, unseen_bend
from service.core.weighting import fits_of_curve, weigh
from service.errors import InvalidInput

__all__ = ["analyse", "check"]

Progress = Callable[[str, int, int], None]
STAGES = ("fit", "cross_validate", "choose", "check", "judge")


def analyse(observations: Observations, plan: Plan, *, progress: Progress | None = None) -> Result:
    """Fit every degree, cross-validate all exactly, choose, check, judge.

    progress is called with (stage, done, of). Raises InvalidInput where the plan cannot run on the data.
    """
    say = progress or _quiet
    check(observations, plan)
    say("fit", 0, 1)
    top = highest_estimable(observations, plan.max_degree, plan.intercept)
    reach = highest_estimable(observations, plan.max_degree + TERMS, plan.intercept)
    weighted = weigh(observations, plan, top=top, reach=reach)
    tried = weighted.fits
    if tried.top < plan.min_degree:
        message = f"values lie too close together to tell a curve of degree {plan.min_degree} from a lower one"
        raise InvalidInput.at("/dataset/x", message)
    folds = make_folds(observations, plan.resampling)
    held = cross_validate(tried, folds, lambda done, of: say("cross_validate", done, of))
    say("choose", 0, 1)
    by_criterion = criteria(tried)
    choice = choose(tried, held, by_criterion, plan, weighted.walked)
    degree = choice.degree
    full, weights, digits = fits_of_curve(observations, weighted, degree)
    working_range = _working_range(full.domain, plan.working_range)
    known = plan.known_uncertainty
    curve, exact = describe_curve(full, degree, absolute=known, digits=digits)
    coefficients = np.array(curve.coefficients)
    monotonic = degree > 0 and is_monotonic(coefficients, full.domain, working_range)
    slope = slope_range(coefficients, full.domain, working_range)
    say("check", 0, 1)
    # the walk has them as far as the plan tries; one degree more is wanted at its limit
    ratios = choice.walked.ratios if degree < tried.top else gap_ratios(full)
    t = studentised(full, degree, known_uncertainty=known)
    cooks = cooks_distance(full, degree)
    diagnostics = diagnose(
        observations,
        full,
        degree,
        studentised=t,
        cooks=cooks,
        gap_ratio=float(ratios[degree]),
        absolute=weighted.absolute,
        known_uncertainty=known,
    )
    least_slope = min(abs(slope[0]), abs(slope[1])) if monotonic else None
    found = Findings(
        observations=observations,
        plan=plan,
        working_range=working_range,
        weighted=weighted,
        full=full,
        tried=tried,
        held=held,
        choice=choice,
        curve=curve,
        coefficients=coefficients,
        monotonic=monotonic,
        slope=slope,
        diagnostics=diagnostics,
        studentised=t,
        cooks=cooks,
        lack_of_fit=lack_of_fit(observations, full),
        unseen=unseen_bend(
            full, degree, working_range, least_slope=least_slope, absolute=known, confidence=plan.bend_confidence
        ),
        gap_ratios=ratios,
    )
    say("judge", 0, 1)
    warnings = all_warnings(found)
    answers = answer_requirements(found)
    candidates = describe_candidates(
        tried,
        held,
        by_criterion,
        plan,
        p_values=choice.walked.p,
        lack_of_fit=found.lack_of_fit,
        exact=exact if full is weighted.full else None,
        working_range=working_range,
    )
    return Result(
        points=observations.n,
        levels=observations.levels,
        working_range=working_range,
        chosen_degree=degree,
        candidates=tuple(candidates),
        weights=weights,
        decision=choice.decision,
        curve=curve,
        diagnostics=diagnostics,
        unseen_bend=found.unseen.bend,
        warnings=tuple(warnings),
        requirements=tuple(answers),
        verdict=judge(found, warnings, answers),
        resampling=folds.record,
    )


def _quiet(stage: str, done: int, of: int) -> None:
    """No one listens."""


def _working_range(domain: tuple[float, float], asked: tuple[float, float] | None) -> tuple[float, float]:
    """The part of the range asked for that the points cover: nothing is claimed beyond them."""
    if asked is None:
        return domain
    return max(domain[0], asked[0]), min(domain[1], asked[1])
