"""Tail probabilities and quantiles that keep their digits far out.

F and t tails through the regularised incomplete beta function (Abramowitz & Stegun, 26.5 and 26.6).
"""

from typing import Any

import numpy as np
from scipy import special


def f_tail(f: Any, df1: Any, df2: Any) -> Any:
    """P(F > f) for F(df1, df2); array-like in, array out."""
    f = np.asarray(f, dtype=np.float64)
    return special.betainc(np.asarray(df2) / 2, np.asarray(df1) / 2, df2 / (df2 + df1 * f))


def t_two_sided(t: Any, df: Any) -> Any:
    """P(|T| > |t|) for Student's t with df degrees of freedom."""
    t = np.asarray(t, dtype=np.float64)
    return special.betainc(np.asarray(df) / 2, 0.5, df / (df + t * t))


def chi2_tail(value: Any, df: Any) -> Any:
    """P(chi-square > value)."""
    return special.chdtrc(df, value)


def z_two_sided(z: Any) -> Any:
    """P(|Z| > |z|) for the standard normal."""
    return special.erfc(np.abs(z) / np.sqrt(2.0))


def t_quantile(p: float, df: float) -> float:
    """Quantile of Student's t."""
    return float(special.stdtrit(df, p))


def z_quantile(p: float) -> float:
    """Quantile of the standard normal."""
    return float(special.ndtri(p))
