"""Unseen bend: the largest error that a term too small for these data to show could still cause."""

from dataclasses import dataclass

import numpy as np

from service.core.basis import grid_over
from service.core.nested import NestedFits
from service.core.observations import Floats
from service.core.result import UnseenBend, UnseenTerm
from service.core.tails import t_quantile, z_quantile

TERMS = 3
METHOD = (
    "upper {:g} % bound of each of the next terms (orthonormal polynomial), times its largest value in the working "
    "range; root of the sum of squares"
)


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Unseen:
    """The unseen bend, and its profile: `profile(x)` bounds the bend at each x, in the unit of y."""

    bend: UnseenBend
    bounds: Floats
    first_column: int
    fits: NestedFits

    def profile(self, x: Floats) -> Floats:
        """Root of the sum of squares of the bounded terms at x: (len(x),)."""
        if self.bounds.size == 0:
            return np.full(x.shape, np.nan)
        last = self.first_column + self.bounds.size
        shapes = self.fits.orthonormal_at(x)[:, self.first_column : last]
        return np.asarray(np.sqrt(np.sum((shapes * self.bounds) ** 2, axis=1)))


def unseen_bend(
    fits: NestedFits,
    degree: int,
    working_range: tuple[float, float],
    *,
    least_slope: float | None,
    absolute: bool,
    confidence: float = 0.95,
) -> Unseen:
    """Bound the next terms above `degree`. least_slope: smallest |dy/dx| in the range, None if not monotonic.

    absolute: the weights are 1/variance. confidence: of the upper bound of each term, one-sided.
    """
    method = METHOD.format(100 * confidence)
    first = fits.columns(degree)
    bounds: list[float] = []
    terms: list[UnseenTerm] = []
    if working_range == fits.domain:
        on_grid = fits.orthonormal_on_grid()
    else:
        on_grid = fits.orthonormal_at(grid_over(working_range)).T
    shapes = np.abs(on_grid).max(axis=1)
    for j in range(degree + 1, min(degree + TERMS, fits.top) + 1):
        column = fits.columns(j) - 1
        b, df = float(fits.qty[column]), fits.df(j)
        se = 1.0 if absolute else float(np.sqrt(max(float(fits.rss[j]), fits.rounding_rss) / df))
        quantile = z_quantile(confidence) if absolute else t_quantile(confidence, df)
        bound = abs(b) + quantile * se
        bounds.append(bound)
        terms.append(
            UnseenTerm(
                degree=j,
                coefficient=b,
                standard_error=se,
                upper_bound=bound,
                largest_effect=bound * float(shapes[column]),
            )
        )
    if not terms:
        reason = "the data can estimate no term above the chosen degree"
        bend = UnseenBend(y=None, x=None, in_single_readings=None, terms=(), method=method, reason=reason)
        return Unseen(bend=bend, bounds=np.zeros(0), first_column=first, fits=fits)
    y = float(np.sqrt(sum(t.largest_effect**2 for t in terms)))
    sd = 1.0 if absolute else float(np.sqrt(max(float(fits.rss[degree]), fits.rounding_rss) / fits.df(degree)))
    single = sd / float(np.sqrt(fits.weights.min()))
    bend = UnseenBend(
        y=y,
        x=y / least_slope if least_slope else None,
        in_single_readings=y / single if single > 0 else None,
        terms=tuple(terms),
        method=method,
        reason=None if least_slope else "in x it has no bound, since the curve is not monotonic",
    )
    return Unseen(bend=bend, bounds=np.array(bounds), first_column=first, fits=fits)
