"""Weights: as asked, from u_y, or chosen by restricted likelihood among 1, 1/|x| and 1/x^2.

Restricted (residual) maximum likelihood: Patterson & Thompson, Biometrika 58 (1971) 545; Harville,
JASA 72 (1977) 320. Errors in x: service.core.errors_in_x.
"""

import math
from dataclasses import dataclass, replace

import numpy as np

from service.core.curve import DIGITS_OF_A_DOUBLE
from service.core.errors_in_x import DIGITS, effective_weights, regress, slope_at
from service.core.nested import Design, NestedFits
from service.core.observations import Floats, Observations
from service.core.plan import Plan
from service.core.result import WeightChoice, WeightModel
from service.core.screen import Walked, choose_with_screen

GAIN_NEEDED = 2.0  # of log-likelihood, to leave equal weights
RATIO_NEEDED = 1.5  # of the largest |x| to the least, for 1/x to differ from 1
ROUNDS = 20
WITH_ERRORS_IN_X = "u_y and u_x"
UNCHANGED = 1e-10  # relative change of the weights


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Weighted:
    """The nested fits under the weights used, with the choice record and, if made already, the walk.

    full: as high as the data allow, a few terms above what the plan tries, to bound what may hide there.
    """

    full: NestedFits
    fits: NestedFits
    choice: WeightChoice
    walked: Walked | None
    absolute: bool
    """True when the weights are 1/variance in the unit of y, so that a chi-square has meaning."""


def weigh(observations: Observations, plan: Plan, *, top: int, reach: int) -> Weighted:
    """Fit every degree under the weights that the plan asks for (checked beforehand against the data).

    top: the highest degree to try; reach: the highest to fit.
    """
    asked = plan.weights
    if asked == "u_y" or (asked == "auto" and observations.u_y is not None):
        return _from_uncertainty(observations, plan, top, reach)
    if asked == "auto":
        return _compare(observations, plan, top, reach)
    x, y = observations.x, observations.y
    full = Design.of(x, y, top=reach, intercept=plan.intercept).fit(power_weights(x, asked))
    choice = WeightChoice(asked=asked, used=asked, common_degree=None, compared=(), why="as the plan asks")
    return Weighted(full=full, fits=full.up_to(top), choice=choice, walked=None, absolute=False)


def fits_of_curve(observations: Observations, weighted: Weighted, degree: int) -> tuple[NestedFits, WeightChoice, int]:
    """The fits that the chosen curve is taken from, the weights in words, and the digits that its coefficients hold."""
    full, choice = weighted.full, weighted.choice
    if choice.used != WITH_ERRORS_IN_X:
        return full, choice, DIGITS_OF_A_DOUBLE
    found = regress(observations, full, degree)
    how = "orthogonal distance regression"
    if not found.settled:
        how = "the effective variance too, since orthogonal distance regression did not settle"
    why = f"{choice.why}; the chosen curve by {how}"
    return found.fits, replace(choice, why=why), DIGITS if found.settled else DIGITS_OF_A_DOUBLE


def power_weights(x: Floats, name: str) -> Floats:
    """Weights by name; 1/|x| and 1/x^2 need x without zeros."""
    if name == "1/x":
        return np.asarray(1.0 / np.abs(x))
    if name == "1/x^2":
        return np.asarray(1.0 / (x * x))
    return np.ones_like(x)


def restricted_log_likelihood(fits: NestedFits, degree: int) -> float:
    """Restricted log-likelihood at the best error variance, up to a constant common to all weightings.

    -(1/2) [ (n-p) log(RSS/(n-p)) + log det(X'WX) - sum log w ], X the unweighted basis.
    """
    c, df = fits.columns(degree), fits.df(degree)
    rss = max(float(fits.rss[degree]), fits.rounding_rss, 1e-300)
    log_det = 2.0 * float(np.sum(np.log(np.abs(np.diag(fits.r)[:c]))))
    return -0.5 * (df * math.log(rss / df) + log_det - float(np.sum(np.log(fits.weights))))


def _compare(observations: Observations, plan: Plan, top: int, reach: int) -> Weighted:
    x, y = observations.x, observations.y
    size = np.abs(x)
    design = Design.of(x, y, top=reach, intercept=plan.intercept)
    full = design.fit(np.ones_like(x))
    equal = full.up_to(top)
    why = ""
    if size.min() == 0:
        why = "equal weights: x holds 0, where 1/x has no value"
    elif size.max() / size.min() <= RATIO_NEEDED:
        why = f"equal weights: the largest |x| is within {RATIO_NEEDED} times the least, so 1/x would hardly differ"
    elif equal.rss[equal.top] <= equal.rounding_rss:
        why = "equal weights: the residuals are at the level of rounding and cannot tell"
    if why:
        choice = WeightChoice(asked="auto", used="equal", common_degree=None, compared=(), why=why)
        return Weighted(full=full, fits=equal, choice=choice, walked=None, absolute=False)
    names = ("equal", "1/x", "1/x^2")
    fulls = [full, *(design.fit(power_weights(x, name)) for name in names[1:])]
    all_fits = [f.up_to(top) for f in fulls]
    walks = [choose_with_screen(fits, known_uncertainty=False) for fits in all_fits]
    least = 0 if plan.intercept else 1
    common = min(max(least, *(w.degree for w in walks)), *(f.top for f in all_fits))
    likelihood = [restricted_log_likelihood(fits, common) for fits in all_fits]
    gains = [value - likelihood[0] for value in likelihood]
    best = int(np.argmax(gains))
    if gains[best] < GAIN_NEEDED:
        best = 0
    compared = tuple(
        WeightModel(weights=name, picks_degree=w.degree, restricted_log_likelihood=value, gain_over_equal=gain)
        for name, w, value, gain in zip(names, walks, likelihood, gains, strict=True)
    )
    if best == 0:
        most = max(gains[1:])
        why = f"equal weights: no other gains {GAIN_NEEDED:g} or more in restricted log-likelihood (most: {most:.2f})"
    else:
        why = f"{names[best]}: gains {gains[best]:.2f} in restricted log-likelihood over equal weights"
    choice = WeightChoice(asked="auto", used=names[best], common_degree=common, compared=compared, why=why)
    return Weighted(full=fulls[best], fits=all_fits[best], choice=choice, walked=walks[best], absolute=False)


def _from_uncertainty(observations: Observations, plan: Plan, top: int, reach: int) -> Weighted:
    assert observations.u_y is not None
    design = Design.of(observations.x, observations.y, top=reach, intercept=plan.intercept)
    full = design.fit(1.0 / observations.u_y**2)
    used, why = "u_y", "1/u_y^2, from the uncertainties given"
    if observations.u_x is not None:
        full = _with_effective_variance(observations, plan, full, design, top)
        used = WITH_ERRORS_IN_X
        why = "1/(u_y^2 + (dp/dx)^2 u_x^2), the effective variance, from the uncertainties given"
    choice = WeightChoice(asked=plan.weights, used=used, common_degree=None, compared=(), why=why)
    return Weighted(full=full, fits=full.up_to(top), choice=choice, walked=None, absolute=True)


def _with_effective_variance(
    observations: Observations, plan: Plan, full: NestedFits, design: Design, top: int
) -> NestedFits:
    """Slopes from the curve that `least_bend` picks, weights from the slopes, until they agree."""
    for _ in range(ROUNDS):
        fits = full.up_to(top)
        walked = choose_with_screen(fits, known_uncertainty=plan.known_uncertainty)
        degree = min(max(walked.degree, plan.min_degree), fits.top)
        new = effective_weights(observations, slope_at(fits, degree, observations.x))
        change = float(np.max(np.abs(new / full.weights - 1)))
        full = design.fit(new)
        if change < UNCHANGED:
            break
    return full
