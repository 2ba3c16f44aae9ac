"""The point screen of `least_bend`: set aside at most two wild points, for choosing only."""

from dataclasses import dataclass

import numpy as np

from service.core.least_bend import Look, gap_factors, gap_ratios, term_p_values, walk
from service.core.nested import NestedFits, fit_all
from service.core.observations import Floats
from service.core.tails import t_two_sided, z_two_sided

MOST_POINTS = 2
BONFERRONI = 0.01
MOST_LEVERAGE = 0.8
LEAST = 2.9  # a smaller residual has no Bonferroni p below 0.01, even among three points and with a known deviation


@dataclass(frozen=True, kw_only=True, slots=True)
class SetAside:
    """One point set aside: which, at which degree it stood out, and how far."""

    point: int
    degree: int
    studentised: float
    p_bonferroni: float


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Walked:
    """The walk on all points, the points set aside, and the walk without them (same if none)."""

    looks: list[Look]
    aside: tuple[SetAside, ...]
    looks_without: list[Look]
    p: Floats
    factors: Floats
    ratios: Floats

    @property
    def degree(self) -> int:
        """The chosen degree, before `min_degree`."""
        return self.looks_without[-1].to_degree

    @property
    def degree_with_all(self) -> int:
        """What the walk on all points chooses."""
        return self.looks[-1].to_degree


def studentised(fits: NestedFits, degree: int, *, known_uncertainty: bool = False) -> Floats:
    """Externally studentised residuals (Cook & Weisberg 1982, 2.2.1): (n,), NaN where undefined.

    With known uncertainty: residual over its known standard deviation.
    """
    return np.asarray(_studentised(fits, slice(degree, degree + 1), known_uncertainty)[:, 0])


def _studentised(fits: NestedFits, degrees: slice, known_uncertainty: bool) -> Floats:
    """By degree, one a column."""
    e = fits.residuals[:, degrees]
    spare = 1 - fits.leverage[:, degrees]
    spare[spare < 1e-10] = np.nan
    if known_uncertainty:
        return np.asarray(e / np.sqrt(spare))
    rss = fits.rss[degrees]
    df = fits.df(degrees.start) - 1.0 - np.arange(rss.size)
    # a point that alone spoils an otherwise exact fit: keep its residual large but finite
    left = np.maximum(rss - e * e / spare, fits.rounding_rss + 1e-14 * rss)
    t = e / np.sqrt(spare * left / np.where((df < 1) | (rss <= fits.rounding_rss), np.nan, df))
    return np.asarray(t)


def farthest(values: Floats) -> int | None:
    """Index of the value farthest from 0, NaN apart; None where all are NaN."""
    size = np.abs(values)
    size[np.isnan(size)] = -1.0
    place = int(size.argmax())
    return place if size[place] >= 0 else None


def outlier_p(value: float, fits: NestedFits, degree: int, *, known_uncertainty: bool = False) -> float:
    """Bonferroni p-value of the largest studentised residual."""
    if known_uncertainty:
        p = float(z_two_sided(value))
    else:
        p = float(t_two_sided(value, fits.df(degree) - 1))
    return min(1.0, p * fits.n)


def choose_with_screen(fits: NestedFits, *, known_uncertainty: bool, screen: bool = True) -> Walked:
    """Walk; set aside the wildest point at the chosen degree or the next; walk again; at most twice."""
    p, factors, ratios, looks = _walk(fits, known_uncertainty)
    kept = np.arange(fits.n)
    aside: list[SetAside] = []
    current, looks_without = fits, looks
    while screen and len(aside) < MOST_POINTS:
        wild = _wildest(current, looks_without[-1].to_degree, known_uncertainty)
        if wild is None:
            break
        place, degree, value, p_bonferroni = wild
        keep = np.delete(np.arange(current.n), place)
        x = current.x[keep]
        top = min(fits.top, np.unique(x).size - (1 if fits.intercept else 0), x.size - (2 if fits.intercept else 1))
        if top < 1 or x.min() == x.max():
            break
        aside.append(SetAside(point=int(kept[place]), degree=degree, studentised=value, p_bonferroni=p_bonferroni))
        kept = kept[keep]
        current = fit_all(x, current.y[keep], current.weights[keep], top=top, intercept=fits.intercept)
        looks_without = _walk(current, known_uncertainty)[3]
    return Walked(looks=looks, aside=tuple(aside), looks_without=looks_without, p=p, factors=factors, ratios=ratios)


def _walk(fits: NestedFits, known_uncertainty: bool) -> tuple[Floats, Floats, Floats, list[Look]]:
    p = term_p_values(fits.rss, fits.all_df(), fits.rounding_rss, known_uncertainty=known_uncertainty)
    ratios = gap_ratios(fits)
    factors = gap_factors(ratios)
    return p, factors, ratios, walk(p.tolist(), factors.tolist(), fits.n)


def _wildest(fits: NestedFits, chosen: int, known_uncertainty: bool) -> tuple[int, int, float, float] | None:
    first = chosen if fits.intercept else max(chosen, 1)
    degrees = slice(first, chosen + 2)
    t = _studentised(fits, degrees, known_uncertainty)
    size = np.abs(t)
    size[~(size >= LEAST) | (fits.leverage[:, degrees] >= MOST_LEVERAGE)] = 0.0  # NaN among them
    best: tuple[int, int, float, float] | None = None
    for column, place in enumerate(size.argmax(axis=0).tolist()):
        if size[place, column] == 0:
            continue
        value, degree = float(t[place, column]), first + column
        p = outlier_p(value, fits, degree, known_uncertainty=known_uncertainty)
        if p < BONFERRONI and (best is None or p < best[3]):
            best = (place, degree, value, p)
    return best
