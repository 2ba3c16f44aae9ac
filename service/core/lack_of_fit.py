"""Lack of fit against the pure error of replicates, for every degree (Draper & Smith 1998, 2.1)."""

import numpy as np

from service.core.nested import NestedFits
from service.core.observations import Floats, Observations
from service.core.result import Test
from service.core.tails import f_tail


def pure_error(observations: Observations, weights: Floats) -> tuple[float, int]:
    """Weighted sum of squares about the weighted mean of each level, and its degrees of freedom."""
    level = observations.level
    total = np.bincount(level, weights=weights)
    mean = np.bincount(level, weights=weights * observations.y) / total
    off = observations.y - mean[level]
    return float(np.sum(weights * off * off)), observations.n - observations.levels


def lack_of_fit(observations: Observations, fits: NestedFits) -> list[Test | None]:
    """The test of each degree 0..top; None where the data hold no replicates at all.

    Levels grouped with a tolerance hold unequal x; the mean of a level then stands for all of them.
    """
    ss_pure, df_pure = pure_error(observations, fits.weights)
    if df_pure < 1:
        return [None] * (fits.top + 1)
    answers: list[Test | None] = []
    for degree in range(fits.top + 1):
        df = observations.levels - fits.columns(degree)
        if df < 1:
            answers.append(Test(f=None, df=(0, df_pure), p=None, reason="no level is spare at this degree"))
            continue
        ss = max(float(fits.rss[degree]) - ss_pure, 0.0)
        if ss_pure <= fits.rounding_rss:
            reason = "the replicates agree to the level of rounding"
            answers.append(Test(f=None, df=(df, df_pure), p=None, reason=reason))
            continue
        f = (ss / df) / (ss_pure / df_pure)
        answers.append(Test(f=f, df=(df, df_pure), p=float(f_tail(f, df, df_pure))))
    return answers
