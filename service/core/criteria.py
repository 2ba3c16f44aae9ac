"""Information criteria of every degree, R's conventions.

loglik at the maximum-likelihood variance RSS/n; k = coefficients + 1 for the variance.
AIC: Akaike 1974; AICc: Hurvich & Tsai, Biometrika 76 (1989) 297; BIC: Schwarz, Ann. Stat. 6 (1978) 461.
"""

import math
from dataclasses import dataclass

import numpy as np

from service.core.nested import NestedFits
from service.core.observations import Floats


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Criteria:
    """By degree 0..top; NaN where the likelihood is unbounded, aicc also where n - k - 1 < 1."""

    aicc: Floats
    bic: Floats


def criteria(fits: NestedFits) -> Criteria:
    """AICc = AIC + 2k(k+1)/(n-k-1), and BIC = -2 loglik + k ln n, of every degree."""
    k = fits.n - fits.all_df() + 1
    deviance = -2 * log_likelihood(fits)
    spare = fits.n - k - 1
    aicc = deviance + 2 * k + 2 * k * (k + 1) / np.where(spare > 0, spare, np.nan)
    return Criteria(aicc=aicc, bic=deviance + k * math.log(fits.n))


def log_likelihood(fits: NestedFits) -> Floats:
    """Gaussian log-likelihood by degree: (top+1,); NaN where the residuals are at rounding level."""
    n = fits.n
    rss = np.where(fits.rss <= fits.rounding_rss, np.nan, fits.rss)
    weights = float(np.log(fits.weights).sum())
    return np.asarray(0.5 * (weights - n * (math.log(2 * math.pi) + 1 + np.log(rss / n))))
