"""The polynomials that a curve is made of: Chebyshev polynomials of x mapped to [-1, 1]."""

from functools import lru_cache

import numpy as np

from service.core.observations import Floats

GRID = 201  # even points over a range, on which curves and variances are searched for their largest value


def grid_over(interval: tuple[float, float]) -> Floats:
    """GRID even points from end to end."""
    return np.linspace(interval[0], interval[1], GRID)


def basis(x: Floats, domain: tuple[float, float], top: int, intercept: bool) -> Floats:
    """T_0..T_top of t at x; without intercept x/scale times T_0..T_(top-1), which vanish at x = 0."""
    lo, hi = domain
    # (x - lo) + (x - hi) keeps the digits that 2x - lo - hi loses when x is far from 0
    t = ((x - lo) + (x - hi)) / (hi - lo)
    columns = np.empty((top + 1, x.size))
    columns[0] = 1.0
    if top >= 1:
        columns[1] = t
    twice = t + t
    for j in range(2, top + 1):
        np.multiply(twice, columns[j - 1], out=columns[j])
        columns[j] -= columns[j - 2]
    if intercept:
        return columns.T
    return (columns[:top] * (x / max(abs(lo), abs(hi)))).T


@lru_cache(maxsize=32)
def chebyshev_on_grid(top: int) -> Floats:
    """T_0..T_top at GRID even points from -1 to 1: (top+1, GRID)."""
    grid = np.polynomial.chebyshev.chebvander(np.linspace(-1.0, 1.0, GRID), top).T
    grid.flags.writeable = False
    return np.asarray(grid, dtype=np.float64)


def to_chebyshev(domain: tuple[float, float], columns: int) -> Floats:
    """Without intercept: matrix from coefficients on `basis` to coefficients on T_0..T_degree."""
    lo, hi = domain
    scale = max(abs(lo), abs(hi))
    middle, half = (lo + hi) / 2 / scale, (hi - lo) / 2 / scale
    m = np.zeros((columns + 1, columns))  # x/scale = middle + half t, and t T_j = (T_{j+1} + T_|j-1|)/2
    for j in range(columns):
        m[j, j] += middle
        m[j + 1, j] += half / 2
        m[abs(j - 1), j] += half / 2
    return m
