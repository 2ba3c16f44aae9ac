"""The verdict: one word, its reasons, and what would settle it."""

from collections.abc import Sequence

from service.core.advice import settle_bend, settle_range, settle_spare_points
from service.core.bend_limit import bend_limits
from service.core.checks.points import OUTSIDE_SHARE
from service.core.findings import Findings
from service.core.result import Advice, Judgement, Reason, RequirementAnswer, VerdictWord, Warning

LEAST_DF = 2


def judge(found: Findings, warnings: Sequence[Warning], answers: Sequence[RequirementAnswer]) -> Judgement:
    """inadequate over undecided over conditional over adequate; every reason is listed, whichever word wins."""
    reasons: list[Reason] = []
    advice: list[Advice] = []
    failed = [a for a in answers if a.met is False]
    coded = {w.code for w in warnings}
    for a in failed:
        if a.requirement == "monotonic" and "not_monotonic" in coded:
            continue  # the warning says it already
        reasons.append(Reason(code=f"{a.requirement}_not_met", severity="serious", message=a.message))
    serious = [w for w in warnings if w.severity == "serious"]
    reasons += [Reason(code=w.code, severity="serious", message=w.message) for w in serious]
    bends = any(w.code == "curvature_left" and w.severity != "note" for w in warnings)
    open_questions = _undecided(found, answers, advice, bends=bends)
    reasons += open_questions
    cautions = [w for w in warnings if w.severity == "caution"]
    reasons += [Reason(code=w.code, severity="caution", message=w.message) for w in cautions]
    verdict: VerdictWord
    if failed or serious:
        verdict = "inadequate"
    elif open_questions:
        verdict = "undecided"
    elif cautions:
        verdict = "conditional"
    else:
        verdict = "adequate"
        asked = "Every requirement of the plan is met" if answers else "The plan makes no requirement"
        message = f"{asked}, and nothing found against degree {found.degree} goes beyond a note."
        reasons.append(Reason(code="nothing_against", severity="note", message=message))
    return Judgement(verdict=verdict, reasons=tuple(reasons), advice=tuple(advice))


def _undecided(
    found: Findings, answers: Sequence[RequirementAnswer], advice: list[Advice], *, bends: bool
) -> list[Reason]:
    """What the data cannot tell. Appends to `advice` what would settle it."""
    reasons = [*_nothing_to_find(found), *_not_covered(found, advice), *_too_few(found, advice)]
    reasons += _bend_above_limit(found, advice, bends=bends)
    for answer in answers:
        said_already = answer.requirement == "max_unseen_bend" or (
            answer.requirement == "monotonic" and found.no_dependence
        )
        if answer.met is None and not said_already:
            code = f"{answer.requirement}_undecided"
            reasons.append(Reason(code=code, severity="caution", message=answer.message))
    return reasons


def _nothing_to_find(found: Findings) -> list[Reason]:
    if not found.no_dependence:
        return []
    message = (
        "The readings do not show that y depends on x: chance alone gives a curve like this one (F-test of the whole "
        f"curve, p = {found.curve.f.p:.2g}), so nothing can be found back from y. Check that the columns belong "
        "together and that the range is the one meant; then repeat."
    )
    return [Reason(code="no_dependence", severity="caution", message=message)]


def _not_covered(found: Findings, advice: list[Advice]) -> list[Reason]:
    if found.uncovered <= OUTSIDE_SHARE or found.plan.working_range is None:
        return []
    advice.append(settle_range(found))
    (lo, hi), (first, last) = found.plan.working_range, found.full.domain
    message = (
        f"The working range asked for is {found.x_words(lo)} to {found.x_words(hi)}, and the points lie from "
        f"{found.x_words(first)} to {found.x_words(last)}: nothing is known beyond them, and what is answered here "
        f"holds between them only. {advice[-1].message}"
    )
    return [Reason(code="range_not_covered", severity="caution", message=message)]


def _too_few(found: Findings, advice: list[Advice]) -> list[Reason]:
    spare_levels = found.observations.levels - found.full.columns(found.degree)
    if found.curve.degrees_of_freedom >= LEAST_DF and spare_levels >= 1:
        return []
    advice.append(settle_spare_points(found))
    message = (
        f"Degree {found.degree} takes {found.full.columns(found.degree)} coefficients from {found.observations.n} "
        f"points at {found.observations.levels} levels: too little is left over to judge the fit. {advice[-1].message}"
    )
    return [Reason(code="too_few_spare_points", severity="caution", message=message)]


def _bend_above_limit(found: Findings, advice: list[Advice], *, bends: bool) -> list[Reason]:
    """bends: a bend shows already, so that no number of further readings would find it absent."""
    reasons: list[Reason] = []
    bend = found.unseen
    for limit in bend_limits(found):
        if bend.bounds.size == 0:
            message = (
                f"The data can estimate no term above degree {found.degree}, so the unseen bend cannot be held against "
                f"{limit.words}."
            )
            reasons.append(Reason(code="bend_may_hide", severity="caution", message=message))
            if not advice:
                advice.append(settle_spare_points(found))
            continue
        ratio = limit.ratio(found.full, bend.first_column, bend.bounds)
        if ratio <= 1:
            continue
        if bends:
            message = (
                "The readings bend away from the curve (curvature_left); with what may hide besides, the bend could "
                f"reach {ratio:.4g} times {limit.words}. A higher degree or a narrower working range would settle it, "
                "not more readings."
            )
        else:
            plans = settle_bend(found, limit)
            advice.extend(plans)
            message = f"A bend too small for these data to show could still reach {ratio:.4g} times {limit.words}." + (
                f" {plans[0].message}" if plans else " No small number of further readings would settle it."
            )
        reasons.append(Reason(code="bend_may_hide", severity="caution", message=message))
    return reasons
