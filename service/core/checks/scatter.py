"""Warnings about the scatter of the readings round the curve."""

import numpy as np

from service.core.checks.levels import CAUTION, CAUTION_OF_TWO, from_test, severity_of
from service.core.findings import Findings
from service.core.result import Evidence, Warning

SMALL_N = 8  # up to here the weights cannot be told from the data (simulation: missed in 90 % of sets)
CLEAR_GAIN = 4.0


def spread_changes(found: Findings) -> Warning | None:
    """Unequal variance left under the weights used."""
    test = found.diagnostics.breusch_pagan
    severity = severity_of(test.p)
    if severity is None:
        return None
    message = (
        "The scatter of the readings changes along the range more than the weights used allow for: stated "
        "uncertainties are too small where readings scatter most and too large elsewhere. Give u_y for each reading"
        + (
            ", or ask for weights 1/x or 1/x^2 where scatter grows with x."
            if bool((found.observations.x != 0).all())
            else " (weights 1/x and 1/x^2 have no value at x = 0)."
        )
    )
    return from_test("spread_changes", test, severity, message, threshold=CAUTION)


def not_normal(found: Findings) -> Warning | None:
    """Residuals that are not normal."""
    test = found.diagnostics.normality
    severity = severity_of(test.p)
    if severity is None:
        return None
    message = (
        "The residuals do not look normally distributed (a wild reading, rounding, or two populations). The curve "
        "stands, but p-values and coverage intervals are approximate. Look at the quantile plot and at suspect points."
    )
    return from_test("not_normal", test, severity, message, threshold=CAUTION)


def neighbours_correlated(found: Findings) -> Warning | None:
    """Neighbouring residuals alike: in time (drift, hysteresis) or along x (bend)."""
    by_time, by_x = found.diagnostics.durbin_watson_measured, found.diagnostics.durbin_watson_by_x
    usable = [(t.p, name, t) for name, t in (("time", by_time), ("x", by_x)) if t.p is not None]
    if not usable:
        return None
    p, order, test = min(usable, key=lambda u: u[0])
    severity = severity_of(p, caution=CAUTION_OF_TWO)
    if severity is None:
        return None
    steps = np.diff(found.observations.x)
    both = bool((steps >= 0).all() or (steps <= 0).all())  # measured in order of x: time and x are one
    alike = test.statistic is not None and test.statistic < 2
    series = "look at the series apart" if found.observations.series else "name the passes as series"
    message = _alike("both" if both else order, series) if alike else _in_turn(order, series)
    return from_test("neighbours_correlated", test, severity, message, threshold=CAUTION_OF_TWO)


def _alike(order: str, series: str) -> str:
    causes = {
        "time": (
            "in the order measured: the instrument drifts, warms up or shows hysteresis. Measure the levels in random "
            f"order, {series}, and let the instrument settle"
        ),
        "x": "in order of x: a bend is left, or levels share an error of their standard. Look at the residuals by x",
        "both": (
            "in the order measured, which is also the order of x: a bend that is left, a curve forced through 0, and a "
            "drift of the instrument look the same. Measure the levels in random order, and look at the residuals by x"
        ),
    }
    return f"Neighbouring readings err alike {causes[order]}. Until then the uncertainty of the curve is understated."


def _in_turn(order: str, series: str) -> str:
    where = "in order of x" if order == "x" else "in the order measured"
    return (
        f"Neighbouring readings err in turn to opposite sides {where}: two kinds of readings alternate, such as rising "
        f"and falling passes (hysteresis), two channels or two observers; {series}. Until then the scatter "
        "is that between the two, not that of one reading."
    )


def series_differ(found: Findings) -> Warning | None:
    """One series sits off the common curve."""
    test = found.diagnostics.series
    severity = severity_of(test.p)
    if severity is None:
        return None
    message = (
        "The series do not lie on one curve: at least one sits higher or lower, or rises more steeply, as a whole "
        "(hysteresis, another day, another operator). The common curve is right for none of them. Find the cause, or "
        "add the difference between series to the uncertainty."
    )
    return from_test("series_differ", test, severity, message, threshold=CAUTION)


def uncertainty_inconsistent(found: Findings) -> Warning | None:
    """The scatter does not match the uncertainties stated."""
    test = found.diagnostics.consistency
    severity = severity_of(test.p)
    if severity is None or test.statistic is None or test.df is None:
        return None
    larger = test.statistic > test.df[0]
    message = (
        "The readings scatter more than their stated uncertainties allow: some u_y are too small, a contribution is "
        "missing, or a bend is left. Do not use the stated uncertainties before this is explained."
        if larger
        else "The readings scatter less than their stated uncertainties suggest: u_y may be too large, or may hold a "
        "part common to all readings, which a fit cannot show."
    )
    return from_test("uncertainty_inconsistent", test, severity if larger else "note", message, threshold=CAUTION)


def weights_guessed(found: Findings) -> Warning | None:
    """Weights chosen from the data where the data can hardly tell."""
    choice = found.weighted.choice
    if choice.asked != "auto" or not choice.compared:
        return None
    n = found.observations.n
    gain = max(m.gain_over_equal for m in choice.compared)
    method = "restricted log-likelihood of 1, 1/|x| and 1/x^2 (Harville 1977)"
    if choice.used != "equal" and (gain < CLEAR_GAIN or n <= SMALL_N):
        severity, message = (
            "caution",
            (
                f"Weights {choice.used} were chosen from the data on slight evidence (gain {gain:.1f} in "
                f"log-likelihood, {n} points). Give u_y, or fix the weights in the plan from the method's validation."
            ),
        )
    elif choice.used == "equal" and n <= SMALL_N:
        severity, message = (
            "note",
            (
                f"With {n} points the data cannot show whether scatter grows with x; equal weights are assumed. Fix "
                "the weights in the plan from the method's validation, or give u_y."
            ),
        )
    else:
        return None
    evidence = Evidence(statistic=gain, value=float(n), threshold=CLEAR_GAIN)
    return Warning(
        code="weights_guessed",
        severity="caution" if severity == "caution" else "note",
        message=message,
        evidence=evidence,
        method=method,
    )


def resolution_coarse(found: Findings) -> Warning | None:
    """Readings rounded as coarsely as they scatter."""
    step, sd = found.diagnostics.resolution, found.curve.residual_sd
    if step is None or not sd or found.exact or not bool((found.full.weights == found.full.weights[0]).all()):
        return None
    ratio = step / (sd / float(found.full.weights[0]) ** 0.5)
    if ratio < 1:
        return None
    return Warning(
        code="resolution_coarse",
        severity="caution" if ratio >= 2 else "note",
        message=(
            f"The readings come in steps of {step:g}, {ratio:.1f} times their scatter: rounding, not the instrument, "
            "decides what can be seen. Read more digits; repeats that all show the same number add no information."
        ),
        evidence=Evidence(statistic=ratio, value=step, threshold=2.0),
        method="decimal step of the readings against the residual standard deviation (common practice, no source)",
    )
