"""The rule `least_bend`: walk up the degrees, spending a fixed chance of a false term at each look.

Under normal errors and no effect the p-values of the single terms are independent (Basu 1955), so
the chance of any false term from degree d is exactly 1 - prod(1 - alpha_k) over the terms looked at.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from service.core.nested import NestedFits
from service.core.observations import Floats, Integers
from service.core.tails import f_tail, z_two_sided

BELOW_ANY_LEVEL = 4.0  # F below this has p above 0.045 at any df, and no level exceeds 0.06 x 0.70
SHARES = (0.70, 0.20, 0.07, 0.03)  # of a(n), for a look 1, 2, 3, 4 terms ahead


@dataclass(frozen=True, kw_only=True, slots=True)
class Look:
    """One look in the walk: the first term within its level, or none."""

    from_degree: int
    to_degree: int
    p: float | None
    threshold: float | None
    looked: tuple[tuple[int, float, float], ...]
    """(term, p, level) of each term looked at, in order."""


def spending(n: int) -> float:
    """a(n): the chance of a false term that one round of looks may spend."""
    return min(0.06, 0.2 / math.sqrt(n))


def term_p_values(
    rss: Floats, df: Floats, rounding_rss: float, *, known_uncertainty: bool, least_f: float = 0.0
) -> Floats:
    """p of each term alone: F(1, df_j), or z when the variance is known.

    rss: (..., top+1) by degree; df: residual degrees of freedom by degree, same last axis. p[..., 0]
    is 1. A term that brings the residuals down to rounding has p = 0; terms beyond it have p = 1.
    Terms whose F (or z squared) is below `least_f` are given p = 1 without working it out.
    """
    gain = np.maximum(rss[..., :-1] - rss[..., 1:], 0.0)
    exact = rss <= rounding_rss
    df = df[..., 1:]
    out = np.ones(rss.shape)
    p = out[..., 1:]
    f = gain if known_uncertainty else gain * df / np.where(exact[..., 1:], 1.0, rss[..., 1:])
    worth = f >= least_f
    if known_uncertainty:
        p[worth] = z_two_sided(np.sqrt(f[worth]))
    else:
        p[worth] = f_tail(f[worth], 1, np.broadcast_to(df, f.shape)[worth] if df.ndim < f.ndim else df[worth])
    if not known_uncertainty:
        p[exact[..., 1:]] = 0.0
    p[exact[..., :-1]] = 1.0
    return out


def gap_ratios(fits: NestedFits) -> Floats:
    """g_j by degree: root of the largest prediction variance over the range to that of one reading.

    Above 1 the curve is less certain somewhere (in a gap, as a rule) than a single reading is.
    """
    shapes = fits.orthonormal_on_grid()
    h = np.cumsum(shapes * shapes, axis=0)
    g = np.sqrt(h.max(axis=1) * float(fits.weights.min()))
    return g if fits.intercept else np.concatenate(([0.0], g))


def gap_factors(ratios: Floats) -> Floats:
    """min(1, 4/g^2): a term that swings freely in a gap must show more before it is believed."""
    return 4.0 / np.maximum(ratios * ratios, 4.0)


def walk(p: Sequence[float], factors: Sequence[float], n: int) -> list[Look]:
    """From degree 0, jump to the nearest term within its level; stop when no term in sight is.

    p, factors: by degree 0..top. The last Look stays where it is: its `to_degree` is the choice.
    """
    a, top = spending(n), len(p) - 1
    looks: list[Look] = []
    d = 0
    while True:
        looked: list[tuple[int, float, float]] = []
        found: int | None = None
        for j, share in zip(range(d + 1, top + 1), SHARES, strict=False):
            level = a * share * factors[j]
            looked.append((j, p[j], level))
            if p[j] <= level:
                found = j
                break
        stays = found is None
        looks.append(
            Look(
                from_degree=d,
                to_degree=d if found is None else found,
                p=None if stays else looked[-1][1],
                threshold=None if stays else looked[-1][2],
                looked=tuple(looked),
            )
        )
        if found is None:
            return looks
        d = found


def walk_many(p: Floats, factors: Floats, n: Floats) -> Integers:
    """`walk` for many datasets at once: p (m, top+1), factors (top+1,), n (m,) -> chosen degrees (m,)."""
    m, size = p.shape
    a = np.minimum(0.06, 0.2 / np.sqrt(n))
    # jump[d]: where a walk at d goes next; d itself where it stops
    jump = np.tile(np.arange(size), (m, 1))
    for k in range(min(len(SHARES), size - 1), 0, -1):  # the nearest term wins, so it is looked at last
        hit = p[:, k:] <= a[:, None] * (SHARES[k - 1] * factors[k:])
        jump[:, :-k][hit] = np.broadcast_to(np.arange(k, size), hit.shape)[hit]
    at = np.zeros(m, dtype=np.intp)
    rows = np.arange(m)
    for _ in range(size - 1):
        at = jump[rows, at]
    return at


def size_under_null(factors: Sequence[float], n: int, chosen: int) -> float:
    """Chance of a term too many from `chosen` when there is none: 1 - prod(1 - alpha_k)."""
    a, keep = spending(n), 1.0
    for k, share in enumerate(SHARES, start=1):
        if chosen + k < len(factors):
            keep *= 1 - a * share * factors[chosen + k]
    return 1 - keep
