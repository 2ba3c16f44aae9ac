"""Common rules for the degree of a polynomial, implemented on their own with numpy: nothing here uses the service.

Every rule takes the nested fits of one calibration and gives a degree from 0 to the highest tried.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
from scipy import special

from tests.benchmarks.calibrations import Calibration, Floats

SIZE = 0.05
FOLDS, REPEATS = 10, 5


@dataclass(frozen=True, eq=False)
class Fits:
    """Fits of degree 0..top by one QR. Errors of held-out points are scaled by sqrt(weight)."""

    data: Calibration
    rng: np.random.Generator

    @property
    def n(self) -> int:
        return self.data.x.size

    @property
    def top(self) -> int:
        return self.data.highest

    @cached_property
    def _factors(self) -> tuple[Floats, Floats, Floats]:
        root = np.ones(self.n) if self.data.weights is None else np.sqrt(self.data.weights)
        q, r = np.linalg.qr(self.basis(self.data.x) * root[:, None])
        return q, r, root * self.data.y

    def basis(self, at: Floats) -> Floats:
        lo, hi = self.data.x.min(), self.data.x.max()
        return np.polynomial.chebyshev.chebvander((2 * at - lo - hi) / (hi - lo), self.top)

    @cached_property
    def rss(self) -> Floats:
        q, _, z = self._factors
        residuals = z[:, None] - np.cumsum(q * (q.T @ z), axis=1)
        return np.maximum(np.sum(residuals**2, axis=0), 1e-24)  # coarse rounding can leave nothing at all

    @cached_property
    def df(self) -> Floats:
        return self.n - 1.0 - np.arange(self.top + 1)

    @cached_property
    def p(self) -> Floats:
        """p of the F-test of each term alone; 1 for degree 0."""
        f = np.maximum(self.rss[:-1] - self.rss[1:], 0) / (self.rss[1:] / self.df[1:])
        return np.concatenate(([1.0], special.fdtrc(1, self.df[1:], f)))

    @cached_property
    def errors(self) -> Floats:
        """Root mean square distance from the true curve, by degree."""
        q, r, z = self._factors
        on_grid = np.linalg.solve(r.T, self.basis(self.data.grid).T).T
        curves = np.cumsum(on_grid * (q.T @ z), axis=1)
        return np.sqrt(np.mean((curves - self.data.truth[:, None]) ** 2, axis=0))

    @cached_property
    def left_out(self) -> Floats:
        """Squared leave-one-out errors: (n, top+1); infinite where a point decides the fit alone."""
        q, _, z = self._factors
        residuals = z[:, None] - np.cumsum(q * (q.T @ z), axis=1)
        spare = 1 - np.cumsum(q * q, axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(spare > 1e-9, (residuals / spare) ** 2, np.inf)

    @cached_property
    def held_out(self) -> Floats:
        """Mean squared held-out error of each fold, REPEATS times FOLDS of them: (folds, top+1).

        Each degree is fitted anew to the rest of the points, in the coordinates of the full QR.
        """
        q, _, z = self._factors
        k = min(FOLDS, self.n)
        out = np.zeros((REPEATS * k, self.n), dtype=bool)
        for repeat in range(REPEATS):
            out[repeat * k + np.arange(self.n) % k, self.rng.permutation(self.n)] = True
        masked = out[:, :, None] * q
        normal = np.eye(self.top + 1) - np.swapaxes(masked, 1, 2) @ masked
        right = q.T @ z - (out * z) @ q
        answer = np.empty((out.shape[0], self.top + 1))
        levels_left = np.array([np.unique(self.data.x[~row]).size for row in out])
        for d in range(self.top + 1):
            ok = levels_left > d
            answer[~ok, d] = np.inf
            b = np.linalg.solve(normal[ok, : d + 1, : d + 1], right[ok, : d + 1, None])[:, :, 0]
            errors = out[ok] * (z - b @ q[:, : d + 1].T)
            answer[ok, d] = np.sum(errors**2, axis=1) / out[ok].sum(axis=1)
        return answer

    @cached_property
    def pure_error(self) -> tuple[float, int, int]:
        """Sum of squares about the level means, its degrees of freedom, number of levels."""
        _, level = np.unique(self.data.x, return_inverse=True)
        w = np.ones(self.n) if self.data.weights is None else self.data.weights
        mean = np.bincount(level, w * self.data.y) / np.bincount(level, w)
        ss = float(np.sum(w * (self.data.y - mean[level]) ** 2))
        return ss, self.n - mean.size, mean.size


def lowest(values: Floats) -> int:
    return int(np.argmin(values))


def one_standard_error(errors: Floats, *, paired: bool, allowed: npt.NDArray[np.bool_] | None = None) -> int:
    """The least degree whose mean error is within one standard error of the lowest; rows are folds or points."""
    mean = errors.mean(axis=0)
    if allowed is not None:
        mean = np.where(allowed, mean, np.inf)
    best = lowest(mean)
    with np.errstate(invalid="ignore"):
        apart = errors - errors[:, [best]] if paired else np.broadcast_to(errors[:, [best]], errors.shape)
        limit = apart.std(axis=0, ddof=1) / np.sqrt(errors.shape[0])
        within = mean - mean[best] <= limit
    within[best] = True
    return int(np.argmax(within & np.isfinite(mean)))


def criterion(fits: Fits, penalty: Callable[[Floats, int], Floats]) -> int:
    """Least n ln(RSS/n) + penalty(k, n), with k = coefficients + 1."""
    k = np.arange(fits.top + 1) + 2.0
    return lowest(fits.n * np.log(fits.rss / fits.n) + penalty(k, fits.n))


def corrected(k: Floats, n: int) -> Floats:
    spare = n - k - 1
    return np.where(spare > 0, 2 * k + 2 * k * (k + 1) / np.where(spare > 0, spare, 1), np.inf)


def forward(fits: Fits, ahead: int) -> int:
    """Take the next term significant at 5 % among the next `ahead`; stop where there is none."""
    d = 0
    while True:
        step = next((k for k in range(1, min(ahead, fits.top - d) + 1) if fits.p[d + k] < SIZE), None)
        if step is None:
            return d
        d += step


def lack_of_fit_first(fits: Fits) -> int:
    """Where there are repeats, drop degrees that the lack-of-fit test rejects; then one standard error, 10-fold."""
    ss, df_pure, levels = fits.pure_error
    allowed = np.ones(fits.top + 1, dtype=bool)
    if df_pure > 0 and ss > 0:
        df = levels - 1.0 - np.arange(fits.top + 1)
        with np.errstate(divide="ignore", invalid="ignore"):
            f = np.maximum(fits.rss - ss, 0) / df / (ss / df_pure)
            allowed = (df < 1) | (special.fdtrc(np.maximum(df, 1), df_pure, f) >= SIZE)
        if not allowed.any():
            return fits.top
    return one_standard_error(first_repeat(fits), paired=False, allowed=allowed)


def first_repeat(fits: Fits) -> Floats:
    return fits.held_out[: min(FOLDS, fits.n)]


ALTERNATIVES: dict[str, Callable[[Fits], int]] = {
    "lowest leave-one-out error": lambda f: lowest(f.left_out.mean(axis=0)),
    "lowest 10-fold error": lambda f: lowest(first_repeat(f).mean(axis=0)),
    "lowest 5x10-fold error": lambda f: lowest(f.held_out.mean(axis=0)),
    "one standard error, 10-fold": lambda f: one_standard_error(first_repeat(f), paired=False),
    "one standard error, 5x10, paired": lambda f: one_standard_error(f.held_out, paired=True),
    "one standard error, leave-one-out, paired": lambda f: one_standard_error(f.left_out, paired=True),
    "AIC": lambda f: criterion(f, lambda k, _: 2 * k),
    "AICc": lambda f: criterion(f, corrected),
    "BIC": lambda f: criterion(f, lambda k, n: k * np.log(n)),
    "forward F at 5 %, stop at the first miss": lambda f: forward(f, 1),
    "forward F at 5 %, looking ahead two": lambda f: forward(f, 2),
    "lack of fit first": lack_of_fit_first,
}
