"""One factorisation for every degree: Chebyshev basis, one QR, and what follows from it.

With A the basis matrix (rows scaled by the square root of the weight) and A = QR, the first columns
of Q span the polynomials of each lower degree, so residuals, leverages and sums of squares of all
degrees are cumulative sums over columns (Golub & Van Loan, Matrix Computations, 4th ed., 5.3).
"""

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from scipy.linalg import lapack

from service.core.basis import basis, chebyshev_on_grid, grid_over, to_chebyshev
from service.core.observations import Floats, Observations

EPS = float(np.finfo(np.float64).eps)
RANK_TOLERANCE = 1e-12  # of a column's length: below it the column adds nothing double precision can hold


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class NestedFits:
    """All least-squares fits of degree 0..top to one dataset under one weighting.

    Arrays have one column or entry per degree 0..top. Without intercept, degree 0 is the zero curve.
    q: (n, p) orthonormal; r: (p, p) upper triangular, with its inverse; qty: (p,) coefficients on q.
    residuals: (n, top+1), scaled by sqrt(weight); leverage: (n, top+1); rss: (top+1,).
    weights: (n,), 1/variance up to a factor. tss: about the weighted mean, or about 0 without intercept.
    rounding_rss: a weighted sum of squares that rounding of x and y alone can cause.
    """

    x: Floats
    y: Floats
    weights: Floats
    domain: tuple[float, float]
    intercept: bool
    top: int
    q: Floats
    r: Floats
    r_inverse: Floats
    qty: Floats
    residuals: Floats
    leverage: Floats
    rss: Floats
    tss: float
    rounding_rss: float

    @property
    def n(self) -> int:
        """Number of points."""
        return self.y.size

    def columns(self, degree: int) -> int:
        """Number of coefficients of a degree."""
        return degree + 1 if self.intercept else degree

    def df(self, degree: int) -> int:
        """Residual degrees of freedom of a degree."""
        return self.n - self.columns(degree)

    def all_df(self) -> Floats:
        """Residual degrees of freedom by degree."""
        return np.arange(self.df(0), self.df(self.top) - 1, -1.0)

    def basis_at(self, x: Floats) -> Floats:
        """The unscaled basis at x: shape (len(x), p)."""
        return basis(x, self.domain, self.top, self.intercept)

    def orthonormal_at(self, x: Floats) -> Floats:
        """The polynomials whose weighted values at the data are the columns of q, at x: (len(x), p)."""
        return np.asarray(self.basis_at(x) @ self.r_inverse)

    def orthonormal_on_grid(self) -> Floats:
        """The same on GRID even points over the data's range, one polynomial a row: (p, GRID)."""
        columns = chebyshev_on_grid(self.top)
        if not self.intercept:
            lo, hi = self.domain
            columns = columns[: self.top] * (grid_over(self.domain) / max(abs(lo), abs(hi)))
        return np.asarray(self.r_inverse.T @ columns)

    def up_to(self, top: int) -> "NestedFits":
        """The same fits as far as degree `top`: parts of the same arrays."""
        if top >= self.top:
            return self
        c = self.columns(top)
        return replace(
            self,
            top=top,
            q=self.q[:, :c],
            r=self.r[:c, :c],
            r_inverse=self.r_inverse[:c, :c],
            qty=self.qty[:c],
            residuals=self.residuals[:, : top + 1],
            leverage=self.leverage[:, : top + 1],
            rss=self.rss[: top + 1],
        )

    def chebyshev(self, degree: int) -> Floats:
        """Coefficients of the fit on T_0..T_degree of t over `domain`: shape (degree+1,)."""
        c = self.columns(degree)
        if c == 0:
            return np.zeros(1)
        b = self.r_inverse[:c, :c] @ self.qty[:c]
        return b if self.intercept else to_chebyshev(self.domain, c) @ b

    def all_chebyshev(self) -> Floats:
        """Coefficients of every degree on T_0..T_top, one degree a column: (top+1, top+1)."""
        b = np.cumsum(self.r_inverse * self.qty, axis=1)
        if self.intercept:
            return np.asarray(b)
        out = np.zeros((self.top + 1, self.top + 1))
        out[:, 1:] = to_chebyshev(self.domain, self.top) @ b
        return out

    def unscaled_covariance(self, degree: int) -> Floats:
        """Covariance of `chebyshev(degree)` for unit residual variance: (degree+1, degree+1)."""
        c = self.columns(degree)
        root = self.r_inverse[:c, :c]
        if not self.intercept:
            root = to_chebyshev(self.domain, c) @ root
        return np.asarray(root @ root.T)


def highest_estimable(observations: Observations, max_degree: int, intercept: bool) -> int:
    """Highest degree that leaves a spare degree of freedom and has levels enough."""
    n, levels = observations.n, observations.levels
    if intercept:
        return min(max_degree, levels - 1, n - 2)
    nonzero = levels - int(np.any(observations.level_x == 0))
    return min(max_degree, nonzero, n - 1)


@lru_cache(maxsize=32)
def _upper(size: int) -> Floats:
    return np.triu(np.ones((size, size)))


def reduced_qr(a: Floats) -> tuple[Floats, Floats]:
    """The reduced QR factorisation, straight from LAPACK: numpy's checks take as long as a small problem."""
    factors, tau, _, _ = lapack.dgeqrf(a)
    r = factors[: a.shape[1]] * _upper(a.shape[1])
    return lapack.dorgqr(factors, tau, overwrite_a=True)[0], r


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Design:
    """What fits of one dataset under different weights share. columns: (p, n), the basis at the points.

    rounding: what rounding of x and y alone can do to one residual.
    """

    x: Floats
    y: Floats
    domain: tuple[float, float]
    intercept: bool
    top: int
    columns: Floats
    rounding: float

    @classmethod
    def of(
        cls, x: Floats, y: Floats, *, top: int, intercept: bool = True, domain: tuple[float, float] | None = None
    ) -> "Design":
        """For degrees 0..top; x, y of shape (n,), top < number of distinct x. domain: the range of x if None."""
        lo, hi = (float(x.min()), float(x.max())) if domain is None else domain
        low, high = float(y.min()), float(y.max())
        spread = (high - low) / (hi - lo) * max(abs(lo), abs(hi))
        return cls(
            x=x,
            y=y,
            domain=(lo, hi),
            intercept=intercept,
            top=top,
            columns=basis(x, (lo, hi), top, intercept).T,
            rounding=4 * EPS * (max(abs(low), abs(high)) + spread),
        )

    def fit(self, weights: Floats) -> NestedFits:
        """Fit every degree 0..top, or as far as double precision can tell the columns apart.

        weights: (n,), positive, 1/variance up to a factor.
        """
        root_w = np.sqrt(weights)
        a = (self.columns * root_w).T
        z = root_w * self.y
        q, r = reduced_qr(a)
        top = self.top
        degenerate = np.abs(np.diagonal(r)) <= RANK_TOLERANCE * np.sqrt(np.einsum("ij,ij->j", a, a))
        if degenerate.any():
            p = int(degenerate.argmax())
            top = p - 1 if self.intercept else p
            q, r = q[:, :p], r[:p, :p]
        qty = q.T @ z
        left = z - q @ qty
        again = q.T @ left  # one more projection takes out what rounding left of the fit
        qty = qty + again
        left -= q @ again
        p = qty.size
        steps = np.empty((z.size, p + 1))
        steps[:, 0] = left
        steps[:, 1:] = (q * qty)[:, ::-1]
        residuals = np.cumsum(steps, axis=1)[:, ::-1]
        squares = np.empty(p + 1)
        squares[0] = left @ left
        squares[1:] = (qty * qty)[::-1]
        rss = np.cumsum(squares)[::-1]
        leverage = np.cumsum(q * q, axis=1)
        if self.intercept:
            residuals, rss = residuals[:, 1:], rss[1:]
        else:
            leverage = np.concatenate((np.zeros((z.size, 1)), leverage), axis=1)
        return NestedFits(
            x=self.x,
            y=self.y,
            weights=weights,
            domain=self.domain,
            intercept=self.intercept,
            top=top,
            q=q,
            r=r,
            r_inverse=lapack.dtrtri(r)[0],
            qty=qty,
            residuals=residuals,
            leverage=leverage,
            rss=rss,
            tss=float(rss[0]),
            rounding_rss=float(weights.sum()) * self.rounding**2,
        )


def fit_all(x: Floats, y: Floats, weights: Floats, *, top: int, intercept: bool = True) -> NestedFits:
    """`Design.fit` where one weighting is all that is needed."""
    return Design.of(x, y, top=top, intercept=intercept).fit(weights)
