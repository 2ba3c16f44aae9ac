"""The verdict: one word, its reasons, and what would settle it."""

from collections.abc import Sequence

from service.core.advice import settle_bend, settle_spare_points
from service.core.bend_limit import bend_limits
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
    open_questions = _undecided(found, answers, advice)
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


def _undecided(found: Findings, answers: Sequence[RequirementAnswer], advice: list[Advice]) -> list[Reason]:
    """What the data cannot tell. Appends to `advice` what would settle it."""
    reasons: list[Reason] = []
    df = found.curve.degrees_of_freedom
    spare_levels = found.observations.levels - found.full.columns(found.degree)
    if df < LEAST_DF or spare_levels < 1:
        message = (
            f"Degree {found.degree} takes {found.full.columns(found.degree)} coefficients from {found.observations.n} "
            f"points at {found.observations.levels} levels: too little is left over to judge the fit."
        )
        reasons.append(Reason(code="too_few_spare_points", severity="caution", message=message))
        advice.append(settle_spare_points(found))
    bend = found.unseen
    said: set[str] = set()
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
        said.add(limit.words)
        plans = settle_bend(found, limit)
        message = f"A bend too small for these data to show could still reach {ratio:.2g} times {limit.words}." + (
            f" {plans[0].message}" if plans else " No small number of further readings would settle it."
        )
        reasons.append(Reason(code="bend_may_hide", severity="caution", message=message))
        advice.extend(plans)
    for answer in answers:
        if answer.met is None and answer.requirement != "max_unseen_bend":
            code = f"{answer.requirement}_undecided"
            reasons.append(Reason(code=code, severity="caution", message=answer.message))
    return reasons
