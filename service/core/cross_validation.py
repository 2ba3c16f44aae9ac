"""Exact cross-validation of every degree at once, without refits.

For a fold S the held-out errors are e_S + Q_S (I - Q_S'Q_S)^-1 Q_S' e_S (the block form of the
leave-one-out identity; Cook & Weisberg, Residuals and Influence in Regression, 1982, app. A.2).
With LL' = I - Q_S'Q_S and A = Q_S L^-T this is e + A (A'e), and the first columns of A serve the
lower degrees, because leading blocks of L are the factors of leading blocks.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.core.folds import Folds
from service.core.nested import NestedFits
from service.core.observations import Floats, Integers

SINGULAR = 1e-10  # a pivot of I - Q'Q below this: the fold's removal leaves the degree inestimable
BATCH_NUMBERS = 4_000_000  # numbers gathered at a time, to bound memory


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class HeldOut:
    """Held-out errors summarised per fold (f) and degree (d); scaled by sqrt(weight) where weighted.

    sse: (f, d) sum of weighted squared held-out errors; NaN where inestimable. weight: (f,) sum of
    weights in the fold. size: (f,) points in the fold. training_rss: (f, d) residual sum of squares
    of the fit without the fold. repeat_of: (f,). estimable: (f, d).
    """

    sse: Floats
    weight: Floats
    size: Integers
    training_rss: Floats
    repeat_of: Integers
    estimable: npt.NDArray[np.bool_]


def leave_one_out_errors(fits: NestedFits) -> Floats:
    """e / (1 - h) for every degree, scaled by sqrt(weight): (n, top+1); NaN where 1 - h vanishes."""
    spare = 1.0 - fits.leverage
    return fits.residuals / np.where(spare > SINGULAR, spare, np.nan)


def cross_validate(fits: NestedFits, folds: Folds, progress: Callable[[int, int], None] | None = None) -> HeldOut:
    """Hold out every fold once; all degrees 0..top."""
    f, d = folds.size.size, fits.top + 1
    sse, training, weight = np.empty((f, d)), np.empty((f, d)), np.empty(f)
    estimable = np.empty((f, d), dtype=bool)
    mask = _mask(fits)
    # one row of zeros past the end stands for "no point" where folds of unequal size are filled up
    q = np.vstack((fits.q, np.zeros((1, fits.q.shape[1]))))
    e = np.vstack((fits.residuals, np.zeros((1, d))))
    w = np.append(fits.weights, 0.0)
    done = 0
    for chosen in _batches(folds.size, fits.q.shape[1] + d):
        points = folds.points(chosen)
        left = e[points]
        held, ok = _held_out(q[points], left, mask)
        sse[chosen] = np.einsum("fsd,fsd->fd", held, held)
        training[chosen] = fits.rss - np.einsum("fsd,fsd->fd", left, held)
        estimable[chosen] = ok
        weight[chosen] = w[points].sum(axis=1)
        done += chosen.size
        if progress is not None:
            progress(done, f)
    if not estimable.all():
        sse[~estimable] = np.nan
        training[~estimable] = np.nan
    return HeldOut(
        sse=sse,
        weight=weight,
        size=folds.size,
        training_rss=np.maximum(training, 0.0),
        repeat_of=folds.repeat_of,
        estimable=estimable,
    )


def _mask(fits: NestedFits) -> Floats:
    columns = fits.n - fits.all_df()
    return (np.arange(fits.q.shape[1])[:, None] < columns).astype(np.float64)


def _batches(sizes: Integers, width: int) -> Iterator[Integers]:
    """Folds of like size together, no batch above the memory bound."""
    order = np.argsort(sizes, kind="stable")
    ordered = sizes[order]
    start = 0
    while start < order.size:
        alike = int(np.searchsorted(ordered, 2 * ordered[start], side="right"))
        # the largest count of folds that keeps count x (largest size) x width within the bound
        inside = np.arange(1, alike - start + 1) * ordered[start:alike] * width <= BATCH_NUMBERS
        stop = start + max(1, int(np.count_nonzero(inside)))
        yield np.sort(order[start:stop])
        start = stop


def _held_out(q: Floats, e: Floats, mask: Floats) -> tuple[Floats, npt.NDArray[np.bool_]]:
    """q (f, s, p), e (f, s, d), mask (p, d) -> held-out errors (f, s, d), estimable (f, d)."""
    p = q.shape[2]
    qt = q.transpose(0, 2, 1)
    m = np.eye(p) - qt @ q
    try:
        factor = np.linalg.cholesky(m)
        pivots = np.diagonal(factor, axis1=1, axis2=2) ** 2
        if pivots.min() <= SINGULAR:
            factor, pivots = _guarded_cholesky(m)
    except np.linalg.LinAlgError:
        factor, pivots = _guarded_cholesky(m)
    at = qt.copy()  # becomes L^-1 Q', by forward substitution on all folds at once
    for j in range(p):
        if j:
            at[:, j] -= np.einsum("fk,fks->fs", factor[:, j, :j], at[:, :j])
        at[:, j] /= factor[:, j, j, None]
    held = e + at.transpose(0, 2, 1) @ ((at @ e) * mask)
    # a degree is estimable when all pivots of its leading block are
    if pivots.min() > SINGULAR:
        return held, np.ones((q.shape[0], mask.shape[1]), dtype=bool)
    good = np.logical_and.accumulate(pivots > SINGULAR, axis=1)
    return held, (~good).astype(np.float64) @ mask == 0


def _guarded_cholesky(m: Floats) -> tuple[Floats, Floats]:
    """Cholesky factors of many matrices, going on past a vanishing pivot with 1 in its place."""
    f, p, _ = m.shape
    factor = np.zeros_like(m)
    pivots = np.empty((f, p))
    for j in range(p):
        column = m[:, j:, j] - np.einsum("fik,fk->fi", factor[:, j:, :j], factor[:, j, :j])
        pivots[:, j] = column[:, 0]
        root = np.sqrt(np.where(column[:, 0] > SINGULAR, column[:, 0], 1.0))
        factor[:, j:, j] = column / root[:, None]
        factor[:, j, j] = root
    return factor, pivots
