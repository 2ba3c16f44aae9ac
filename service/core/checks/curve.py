"""Warnings about the shape of the chosen curve."""

from service.core.checks.levels import CAUTION, CAUTION_OF_TWO, NOTE, from_test, severity_of
from service.core.findings import Findings
from service.core.plan import Plan
from service.core.result import Evidence, Statistic, Warning


def curvature_left(found: Findings) -> Warning | None:
    """Bend that the chosen degree leaves: lack of fit against replicates, or further terms together."""
    tests = [found.diagnostics.next_terms]
    fit = found.lack_of_fit[found.degree]
    if fit is not None and fit.p is not None:
        method = "lack of fit against the pure error of replicates (Draper & Smith 1998, 2.1)"
        tests.append(Statistic(statistic=fit.f, df=tuple(map(float, fit.df)), p=fit.p, method=method))
    level = CAUTION_OF_TWO if len(tests) == 2 else CAUTION
    usable = [t for t in tests if t.p is not None]
    if not usable:
        return None
    worst = min(usable, key=lambda t: t.p if t.p is not None else 1.0)
    severity = severity_of(worst.p, caution=level)
    if severity is None:
        return None
    message = (
        f"The readings still bend away from the degree-{found.degree} curve more than their scatter explains: values "
        "found with it carry a systematic error that averaging does not remove. Look at the residuals by x; if the "
        "bend repeats in a second run, allow a higher degree or narrow the working range."
        + ("" if found.plan.intercept else " Or the instrument does not read 0 at 0, as the plan has the curve do.")
    )
    return from_test("curvature_left", worst, severity, message, threshold=level)


def not_monotonic(found: Findings) -> Warning | None:
    """A curve that turns within the working range cannot be inverted."""
    if found.monotonic:
        return None
    least, greatest, at = found.slope
    asked = found.plan.requirements.monotonic
    message = (
        f"The curve turns or is flat near x = {found.x_words(at)}: there one reading belongs to more than one value, "
        "and the instrument cannot be used backwards over the whole range. Limit the working range to one side of it"
        + (", or state in the plan that a monotonic curve is not needed." if asked else ".")
    )
    return Warning(
        code="not_monotonic",
        severity="serious" if asked else "note",
        message=message,
        evidence=Evidence(statistic=least, value=greatest, threshold=0.0),
        method="least and greatest slope over the range, from the real roots of the second derivative (calculus)",
    )


def degree_at_limit(found: Findings) -> Warning | None:
    """The choice is the highest degree that the plan or the data allow: a higher one was never tried."""
    if found.degree < found.tried.top or found.degree <= found.plan.min_degree:
        return None
    by_plan = found.tried.top == found.plan.max_degree
    further = found.diagnostics.next_terms.p
    asked = found.plan.max_degree < Plan().max_degree  # a procedure's own limit, not the one that nobody chose
    if by_plan and asked and further is not None and further >= NOTE:
        return Warning(
            code="degree_at_limit",
            severity="note",
            message=(
                f"Degree {found.degree} is the highest that the plan allows. Terms beyond it were tested all the same "
                f"and do not show (p = {further:.2g}), so nothing asks for more."
            ),
            evidence=Evidence(value=float(found.degree), threshold=float(found.tried.top), p=further),
            method=found.diagnostics.next_terms.method,
        )
    limit = "the plan's max_degree" if by_plan else "the number of levels and points"
    action = (
        "Where the procedure leaves the degree open, raise max_degree and run again"
        if by_plan
        else "Measure at more levels and run again"
    )
    return Warning(
        code="degree_at_limit",
        severity="caution",
        message=(
            f"Degree {found.degree} is the highest that {limit} allows, so it is not known whether the bend ends "
            f"there. {action}; where no low degree suffices, the quantity may not follow a polynomial at all."
        ),
        evidence=Evidence(value=float(found.degree), threshold=float(found.tried.top)),
        method="comparison with the highest degree tried (common practice, no source)",
    )


def bend_may_hide(found: Findings) -> Warning | None:
    """Without a limit to hold it against: the unseen bend is many times the scatter of a reading."""
    bend = found.unseen.bend
    if bend.in_single_readings is None or found.exact or bend.in_single_readings <= 4:
        return None
    return Warning(
        code="bend_may_hide",
        severity="note",
        message=(
            f"A bend of up to {bend.y:.3g} (in y), {bend.in_single_readings:.1f} times the scatter of one reading, "
            "could be there without showing in these data. More levels or repeats shrink it."
        ),
        evidence=Evidence(statistic=bend.in_single_readings, value=bend.y, threshold=4.0),
        method=bend.method,
    )


def power_terms_look_insignificant(found: Findings) -> Warning | None:
    """A p-value of a single power says nothing about its need: powers of x share what they explain."""
    p = found.curve.power.p
    doubtful = [k for k, value in enumerate(p) if k >= 1 and value is not None and value > 0.05]
    if found.degree < 2 or not doubtful or found.exact:
        return None
    return Warning(
        code="power_terms_look_insignificant",
        severity="note",
        message=(
            "In the table of powers, x^" + ", x^".join(map(str, doubtful)) + " would look dispensable by its own "
            "p-value. It is not: powers of x overlap, and the degree was judged term by term on independent terms. Do "
            "not drop single powers."
        ),
        evidence=Evidence(value=max(v for k, v in enumerate(p) if k in doubtful and v is not None), threshold=0.05),
        method="t-tests of single powers; why not to act on them: Peixoto, Am. Stat. 44 (1990) 26",
    )


def noise_at_rounding(found: Findings) -> Warning | None:
    """Residuals at rounding level: the data look computed, and scatter cannot be judged."""
    if not found.exact:
        return None
    return Warning(
        code="noise_at_rounding",
        severity="caution",
        message=(
            f"The degree-{found.degree} curve meets every reading to the last digit of the computer. Measured data do "
            "not do that: these look computed, copied from a curve, or read too coarsely to scatter at all, and "
            "nothing can be said about scatter or uncertainty. Post the readings as measured, with every digit."
        ),
        evidence=Evidence(statistic=float(found.full.rss[found.degree]), threshold=found.full.rounding_rss),
        method="residual sum of squares against what rounding of x and y can cause (common practice, no source)",
    )
