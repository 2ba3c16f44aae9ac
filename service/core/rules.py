"""The other rules, each applied to the same numbers, so that the choice can be seen beside them."""

import numpy as np

from service.core.criteria import Criteria
from service.core.cross_validation import HeldOut
from service.core.nested import NestedFits
from service.core.observations import Floats, Integers
from service.core.plan import RULES, Rule
from service.core.result import RuleChoice

NOT_JUDGED = "no degree can be judged by this rule on these data"
RELATIVE_TIE = 1e-12  # values closer than this are equal: the lower degree is taken


def other_rules(fits: NestedFits, held: HeldOut, criteria: Criteria, min_degree: int) -> list[RuleChoice]:
    """What every rule but `least_bend` chooses among degrees min_degree..top."""
    exact = exact_degree(fits, min_degree)
    if exact is not None:
        reason = "the least degree whose residuals are at the level of rounding"
        return [RuleChoice(rule=rule, degree=exact, reason=reason) for rule in RULES if rule != "least_bend"]
    lowest = _least("lowest_cv", pooled_mean_square(held), min_degree)
    return [
        lowest,
        _one_standard_error(held, min_degree, lowest.degree),
        _least("aicc", criteria.aicc, min_degree),
        _least("bic", criteria.bic, min_degree),
    ]


def exact_degree(fits: NestedFits, min_degree: int) -> int | None:
    """The least degree whose residuals are at rounding level: there every criterion is unbounded."""
    exact = np.flatnonzero(fits.rss[min_degree:] <= fits.rounding_rss)
    return int(exact[0]) + min_degree if exact.size else None


def pooled_mean_square(held: HeldOut) -> Floats:
    """Weighted mean of squared held-out errors over all folds and repeats; NaN unless every fold counts."""
    return np.asarray(held.sse.sum(axis=0) / held.weight.sum())


def _least(rule: str, values: Floats, min_degree: int) -> RuleChoice:
    usable = values[min_degree:]
    known = usable[~np.isnan(usable)]
    if known.size == 0:
        return RuleChoice(rule=rule, degree=None, reason=NOT_JUDGED)
    best = float(known.min())
    near = usable <= best + RELATIVE_TIE * abs(best)
    return RuleChoice(rule=rule, degree=int(near.argmax()) + min_degree)


def _one_standard_error(held: HeldOut, min_degree: int, lowest: int | None) -> RuleChoice:
    """The least degree within one standard error of the lowest cross-validated mean square error.

    Breiman, Friedman, Olshen & Stone 1984, 3.4.3; the standard error is that of the fold means within
    a repeat, averaged over repeats.
    """
    rule = "one_standard_error"
    if lowest is None:
        return RuleChoice(rule=rule, degree=None, reason=NOT_JUDGED)
    pooled = pooled_mean_square(held)
    error = _standard_error(held.sse[:, lowest] / held.weight, held.repeat_of)
    if error is None:
        return RuleChoice(rule=rule, degree=None, reason="one fold has no standard error")
    limit = pooled[lowest] + error
    within = np.flatnonzero(pooled[min_degree:] <= limit)
    return RuleChoice(rule=rule, degree=int(within[0]) + min_degree)


def _standard_error(fold_mean: Floats, repeat_of: Integers) -> float | None:
    """Of the mean over the folds of a repeat, averaged over the repeats that hold two folds or more."""
    count = np.bincount(repeat_of)
    scale = float(fold_mean.max()) or 1.0  # squares of squares leave the range of a double for units far from 1
    fold_mean = fold_mean / scale
    off = fold_mean - (np.bincount(repeat_of, weights=fold_mean) / count)[repeat_of]
    usable = count > 1
    if not usable.any():
        return None
    squares, k = np.bincount(repeat_of, weights=off * off)[usable], count[usable]
    return scale * float(np.mean(np.sqrt(squares / (k - 1) / k)))


def stability_by_repeat(rule: Rule, held: HeldOut, min_degree: int) -> list[int]:
    """For the cross-validation rules: the choice of each repeat on its own."""
    picks: list[int] = []
    for r in range(int(held.repeat_of.max()) + 1):
        rows = held.repeat_of == r
        part = HeldOut(
            sse=held.sse[rows],
            weight=held.weight[rows],
            size=held.size[rows],
            training_rss=held.training_rss[rows],
            repeat_of=np.zeros(int(rows.sum()), dtype=np.intp),
            estimable=held.estimable[rows],
        )
        pick = _least("lowest_cv", pooled_mean_square(part), min_degree).degree
        if rule == "one_standard_error":
            pick = _one_standard_error(part, min_degree, pick).degree
        if pick is not None:
            picks.append(pick)
    return picks
