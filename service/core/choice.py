"""The choice of the degree: the plan's rule, its trail, the other rules beside it, and its stability."""

from dataclasses import dataclass

import numpy as np

from service.core.criteria import Criteria
from service.core.cross_validation import HeldOut
from service.core.least_bend import BELOW_ANY_LEVEL, size_under_null, term_p_values, walk_many
from service.core.nested import NestedFits, fit_all
from service.core.observations import Floats, Integers
from service.core.plan import Plan
from service.core.result import Decision, DegreeShare, RuleChoice, Stability, Step
from service.core.rules import other_rules, stability_by_repeat
from service.core.screen import Walked, choose_with_screen


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Choice:
    """The chosen degree with its record; `walked` holds the walk of `least_bend` and its screen."""

    degree: int
    decision: Decision
    walked: Walked


def choose_degree(
    x: Floats,
    y: Floats,
    *,
    weights: Floats | None = None,
    max_degree: int = 6,
    min_degree: int = 0,
    screen: bool = True,
    known_uncertainty: bool = False,
) -> int:
    """The degree that `least_bend` chooses, nothing else: for simulation and quick use.

    weights: 1/variance, absolute if `known_uncertainty`. The highest degree tried is
    min(max_degree, levels - 1, n - 2).
    """
    top = min(max_degree, np.unique(x).size - 1, x.size - 2)
    fits = fit_all(x, y, np.ones_like(x) if weights is None else weights, top=top)
    return max(choose_with_screen(fits, known_uncertainty=known_uncertainty, screen=screen).degree, min_degree)


def choose(fits: NestedFits, held: HeldOut, criteria: Criteria, plan: Plan, walked: Walked | None) -> Choice:
    """Choose under the plan's rule. `walked`: the walk, where the weighting already made it."""
    walked = walked or choose_with_screen(fits, known_uncertainty=plan.known_uncertainty)
    least = min(plan.min_degree, fits.top)
    bend = min(max(walked.degree, least), fits.top)
    rules = [RuleChoice(rule="least_bend", degree=bend), *other_rules(fits, held, criteria, least)]
    chosen = next(r for r in rules if r.rule == plan.rule)
    degree = chosen.degree
    steps = _walk_steps(walked, bend) if plan.rule == "least_bend" else _rule_steps(chosen)
    if degree is None:
        degree = bend
        steps.append(
            Step(
                action="fall_back",
                from_degree=bend,
                to_degree=bend,
                term=None,
                p=None,
                threshold=None,
                points=(),
                words=f"{plan.rule} cannot choose here ({chosen.reason}); what least_bend picks stands: degree {bend}.",
            )
        )
    size = size_under_null(walked.factors.tolist(), fits.n, degree) if plan.rule == "least_bend" else None
    decision = Decision(
        rule=plan.rule,
        steps=tuple(steps),
        rules=tuple(rules),
        stability=_stability(fits, held, plan, degree, walked),
        size=size,
    )
    return Choice(degree=degree, decision=decision, walked=walked)


def _walk_steps(walked: Walked, final: int) -> list[Step]:
    steps = _looks(walked, without=False)
    for aside in walked.aside:
        steps.append(
            Step(
                action="set_aside",
                from_degree=aside.degree,
                to_degree=aside.degree,
                term=None,
                p=aside.p_bonferroni,
                threshold=0.01,
                points=(aside.point,),
                words=(
                    f"Point {aside.point + 1} lies {abs(aside.studentised):.1f} standard deviations from the degree-"
                    f"{aside.degree} curve of the others (Bonferroni p {aside.p_bonferroni:.2g}); it is set aside for "
                    "choosing the degree only and stays in the final fit."
                ),
            )
        )
    if walked.aside:
        steps += _looks(walked, without=True)
    if final > walked.degree:
        steps.append(
            Step(
                action="raise",
                from_degree=walked.degree,
                to_degree=final,
                term=None,
                p=None,
                threshold=None,
                points=(),
                words=f"The plan's min_degree raises the choice from {walked.degree} to {final}.",
            )
        )
    return steps


def _looks(walked: Walked, *, without: bool) -> list[Step]:
    points = tuple(a.point for a in walked.aside) if without else ()
    steps: list[Step] = []
    for look in walked.looks_without if without else walked.looks:
        seen = "; ".join(f"term {j}: p {p:.2g} against {level:.2g}" for j, p, level in look.looked)
        if look.to_degree != look.from_degree:
            action, term = "jump", look.to_degree
            words = f"From degree {look.from_degree} to {look.to_degree}: {seen}."
        else:
            action, term = "stop", None
            words = f"Stop at degree {look.to_degree}: " + (
                f"no further term within its level ({seen})." if seen else "the data or the plan allow no further term."
            )
        steps.append(
            Step(
                action=action,
                from_degree=look.from_degree,
                to_degree=look.to_degree,
                term=term,
                p=look.p,
                threshold=look.threshold,
                points=points,
                words=words,
            )
        )
    return steps


def _rule_steps(chosen: RuleChoice) -> list[Step]:
    if chosen.degree is None:
        return []
    how = {
        "lowest_cv": "the lowest cross-validated mean square error",
        "one_standard_error": "a cross-validated mean square error within one standard error of the lowest, as no "
        "lower degree has",
        "aicc": "the lowest AICc",
        "bic": "the lowest BIC",
    }[chosen.rule]
    words = (
        f"Degree {chosen.degree} has {how}." if chosen.reason is None else f"Degree {chosen.degree}: {chosen.reason}."
    )
    return [
        Step(
            action="pick",
            from_degree=chosen.degree,
            to_degree=chosen.degree,
            term=None,
            p=None,
            threshold=None,
            points=(),
            words=words,
        )
    ]


def _stability(fits: NestedFits, held: HeldOut, plan: Plan, chosen: int, walked: Walked) -> Stability:
    """How often each degree wins when part of the data is left out, from the same factorisation."""
    least = min(plan.min_degree, fits.top)
    if plan.rule in ("lowest_cv", "one_standard_error"):
        picks = np.array(stability_by_repeat(plan.rule, held, least), dtype=np.intp)
        method = f"{plan.rule} on each repeat of the cross-validation alone"
    else:
        usable = held.estimable.all(axis=1) & (fits.n - held.size - fits.columns(fits.top) >= 1)
        rss, size = held.training_rss[usable], fits.n - held.size[usable].astype(np.float64)
        picks = _picks_without_folds(fits, rss, size, plan, walked)
        picks = np.maximum(picks, least)
        method = f"{plan.rule} on the data without each fold in turn; residual sums of squares by the deletion formula"
    if picks.size == 0:
        return Stability(
            resamples=0,
            shares=(),
            chosen_share=None,
            method=method,
            reason="no fold can be left out with all degrees still estimable",
        )
    counts = np.bincount(picks, minlength=fits.top + 1)
    shares = tuple(DegreeShare(degree=int(d), share=float(counts[d] / picks.size)) for d in np.flatnonzero(counts))
    return Stability(
        resamples=int(picks.size), shares=shares, chosen_share=float(counts[chosen] / picks.size), method=method
    )


def _picks_without_folds(fits: NestedFits, rss: Floats, size: Floats, plan: Plan, walked: Walked) -> Integers:
    columns = fits.n - fits.all_df()
    if plan.rule == "least_bend":
        p = term_p_values(
            rss,
            size[:, None] - columns,
            fits.rounding_rss,
            known_uncertainty=plan.known_uncertainty,
            least_f=BELOW_ANY_LEVEL,
        )
        return walk_many(p, walked.factors, size)
    k = columns + 1
    floor = np.maximum(rss, fits.rounding_rss + 1e-300)
    score = size[:, None] * np.log(floor / size[:, None])
    if plan.rule == "bic":
        score += k * np.log(size)[:, None]
    else:
        spare = size[:, None] - k - 1
        score += np.where(spare > 0, 2 * k + 2 * k * (k + 1) / np.where(spare > 0, spare, 1), np.inf)
    if not fits.intercept:
        score[:, 0] = np.inf
    score[:, : min(plan.min_degree, fits.top)] = np.inf
    return np.asarray(np.argmin(score, axis=1), dtype=np.intp)
