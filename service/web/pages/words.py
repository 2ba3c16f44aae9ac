"""What the pages say in words: the verdict first."""

from service.web.figures.names import FigureName

VERDICTS = {
    "adequate": "The chosen degree can be defended: every requirement is met, and notes are all there is to say.",
    "conditional": "Every requirement is met, but something deserves care. Read the cautions before you use it.",
    "inadequate": "Do not use this calibration as it is: a requirement is not met, or something serious was found.",
    "undecided": "These data cannot tell. More readings can; what would settle it is listed below.",
}
STATES = {
    "queued": "Waits for a worker.",
    "running": "A worker computes it now.",
    "succeeded": "Has its result and verdict.",
    "failed": "Ended with an error. The dataset and the plan are kept.",
    "cancelled": "Was called off before it ended.",
}
NEXT = {
    "adequate": "Keep this record with the instrument. Calibrate again when your procedure says so.",
    "conditional": "Settle or accept each caution in writing, as your procedure demands, before anyone uses it.",
    "inadequate": "Mend the cause named above and calibrate again; nothing here releases the instrument.",
    "undecided": "Add the readings named below, or widen what the plan asks, and post the data again.",
}
STAGES = {
    "fit": "fits every degree",
    "cross_validate": "cross-validates",
    "choose": "chooses the degree",
    "check": "checks the fit",
    "judge": "judges",
}
DEGREES = ("constant", "straight line", "quadratic", "cubic", "quartic", "quintic")
RULES = {
    "least_bend": "least bend",
    "lowest_cv": "lowest CV error",
    "one_standard_error": "one standard error",
    "aicc": "AICc",
    "bic": "BIC",
}
EVENTS = {
    "queued": "put in",
    "started": "started",
    "requeued": "waits again",
    "succeeded": "succeeded",
    "failed": "failed",
    "cancelled": "cancelled",
    "purged": "removed by retention",
}
CHECKS = {
    "breusch_pagan": "Spread (Breusch-Pagan)",
    "durbin_watson_measured": "Neighbours in order measured (Durbin-Watson)",
    "durbin_watson_by_x": "Neighbours in order of x (Durbin-Watson)",
    "reset": "Curvature left (RESET)",
    "normality": "Normality",
    "largest_studentised": "Largest studentised residual",
    "next_terms": "Further terms together",
    "series": "Series against each other",
    "consistency": "Stated uncertainty (chi-square)",
}
FIGURES: dict[FigureName, str] = {
    "curve": "Points and chosen curve with its coverage band; the strip below magnifies what is left over.",
    "degrees": "Cross-validation error by degree with its spread over the folds; diamonds: what each rule chooses.",
    "residuals": "Level and without pattern is good. A bow against x is bend left over; a drift in order is time.",
    "normal": "Points near the line and within the band: the errors look normal.",
    "spread": "Level is good. A slope means that the readings scatter more at one end.",
    "leverage": "Points beyond the lines of Cook's distance move the whole curve.",
    "unseen": "What a higher degree, too small for these data to show, could still cause, against what is permitted.",
}
BLANK = "\u115f\u1160\u2800\u3164\uffa0"
"""Characters that count as printable and show nothing."""
CHEBYSHEV = (
    "y is the sum of c_k T_k(t) over k, with t = ((x\N{MINUS SIGN}a)+(x\N{MINUS SIGN}b))/(b\N{MINUS SIGN}a). "
    "Use it where x lies far from 0: powers of x lose digits there, however exact their coefficients."
)
CAUTIONS = (
    "A statistical check does not replace the laboratory's validated procedure or a qualified person's review.",
    "Never extrapolate beyond the calibrated range.",
    "Where people can be hurt (lifting, pressure, dosing, medical use) the governing standard, local code and licensed "
    "practice decide.",
)


def degree_name(degree: int) -> str:
    """`degree 2, quadratic`."""
    return f"degree {degree}, {DEGREES[degree]}" if degree < len(DEGREES) else f"degree {degree}"


def visible(name: str) -> str:
    """The name, or words for one that nobody could see or click."""
    if any(c.isprintable() and not c.isspace() and c not in BLANK for c in name):
        return name
    return f"({len(name)} blank character{'s' if len(name) != 1 else ''})"


def plain(code: str) -> str:
    """A code as words: `max_permissible_error` is `max permissible error`."""
    return code.replace("_", " ")
