"""Information criteria of every degree, R's conventions.

loglik at the maximum-likelihood variance RSS/n; k = coefficients + 1 for the variance.
AIC: Akaike 1974; AICc: Hurvich & Tsai, Biometrika 76 (1989) 297; BIC: Schwarz, Ann. Stat. 6 (1978) 461.
"""

import math

import numpy as np

from service.core.nested import NestedFits
from service.core.observations import Floats


def log_likelihood(fits: NestedFits) -> Floats:
    """Gaussian log-likelihood by degree: (top+1,); NaN where the residuals are at rounding level."""
    n = fits.n
    exact = fits.rss <= fits.rounding_rss
    rss = np.where(exact, 1.0, fits.rss)
    value = 0.5 * (float(np.log(fits.weights).sum()) - n * (math.log(2 * math.pi) + 1 + np.log(rss / n)))
    return np.where(exact, np.nan, value)


def aicc(fits: NestedFits) -> Floats:
    """AIC + 2k(k+1)/(n-k-1) by degree; NaN where n - k - 1 < 1 or the likelihood is unbounded."""
    k = _k(fits)
    spare = fits.n - k - 1
    usable = spare > 0
    value = -2 * log_likelihood(fits) + 2 * k + 2 * k * (k + 1) / np.where(usable, spare, 1.0)
    return np.where(usable, value, np.nan)


def bic(fits: NestedFits) -> Floats:
    """-2 loglik + k ln n by degree; NaN where the likelihood is unbounded."""
    return np.asarray(-2 * log_likelihood(fits) + _k(fits) * math.log(fits.n))


def _k(fits: NestedFits) -> Floats:
    return np.asarray(fits.n - fits.all_df() + 1)
