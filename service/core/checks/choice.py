"""Warnings about how firmly the choice stands."""

from service.core.findings import Findings
from service.core.result import Evidence, Severity, Warning

UNSTABLE_CAUTION = 0.5
UNSTABLE_NOTE = 0.8


def rules_disagree(found: Findings) -> Warning | None:
    """Other rules choose otherwise; it weighs most where the more cautious of them want more, or CV wants less."""
    by_rule = {r.rule: r.degree for r in found.choice.decision.rules}
    others = {rule: d for rule, d in by_rule.items() if d is not None and d != found.degree and rule != found.plan.rule}
    if not others:
        return None
    sparing, lowest = by_rule.get("one_standard_error"), by_rule.get("lowest_cv")
    higher = sparing is not None and sparing > found.degree
    lower = lowest is not None and lowest < found.degree
    severity: Severity = "caution" if higher or lower else "note"
    listed = ", ".join(f"{rule} {d}" for rule, d in sorted(others.items()))
    message = f"Degree {found.degree} is chosen, while other rules would take: {listed}. "
    if higher:
        message += (
            "Even the most sparing cross-validation rule wants a higher degree: look at the residuals by x before "
            "relying on the choice, and add levels where they bend."
        )
    elif lower:
        message += "Cross-validation does no better with it than with a lower degree: a repeat run would settle it."
    else:
        message += (
            "In simulated calibrations the rules that take more take a degree too many in a seventh to a half of the "
            "cases, and one_standard_error too few in a tenth; no action is needed."
        )
    return Warning(
        code="rules_disagree",
        severity=severity,
        message=message,
        evidence=Evidence(value=float(sparing if higher and sparing is not None else max(others.values()))),
        method=(
            "lowest cross-validated error, one standard error (Breiman et al. 1984), AICc (Hurvich & Tsai 1989) and "
            "BIC (Schwarz 1978) on the same fits"
        ),
    )


def unstable_choice(found: Findings) -> Warning | None:
    """The degree changes when part of the data is left out."""
    stability = found.choice.decision.stability
    share = stability.chosen_share
    if share is None or share >= UNSTABLE_NOTE:
        return None
    shares = ", ".join(f"degree {s.degree} in {s.share:.0%}" for s in stability.shares)
    return Warning(
        code="unstable_choice",
        severity="caution" if share < UNSTABLE_CAUTION else "note",
        message=(
            f"When part of the data is left out the choice changes: {shares}. The data are just enough, or not quite, "
            "to tell these degrees apart. Repeat the run or add levels."
        ),
        evidence=Evidence(statistic=share, value=float(stability.resamples), threshold=UNSTABLE_CAUTION),
        method=f"{stability.method} (selection frequency, after Sauerbrei & Schumacher, Stat. Med. 11 (1992) 2093)",
    )


def fold_inestimable(found: Findings) -> Warning | None:
    """Some folds hold all that a degree rests on: cross-validation cannot speak for it."""
    lost = (~found.held.estimable).sum(axis=0)
    least = min(found.plan.min_degree, found.tried.top)
    if not lost[least:].any():
        return None
    chosen = int(lost[found.degree])
    degrees = [str(d) for d in range(least, found.tried.top + 1) if lost[d]]
    listed = f"degree {degrees[0]}" if len(degrees) == 1 else f"the degrees {', '.join(degrees)}"
    message = (
        f"Without some folds {listed} cannot be fitted at all, because too few levels are left"
        + ("; the chosen degree is among them, so cross-validation cannot vouch for it" if chosen else "")
        + ". Add levels, or use a resampling scheme that leaves out less."
    )
    return Warning(
        code="fold_inestimable",
        severity="caution" if chosen else "note",
        message=message,
        evidence=Evidence(value=float(chosen), statistic=float(lost.max()), threshold=0.0),
        method="pivots of I - Q'Q of each fold (Cook & Weisberg 1982, app. A.2)",
    )
