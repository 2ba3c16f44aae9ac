"""Simulated calibrations whose truth is known, drawn from a seeded generator.

A true degree leaves three readings or more to spare. With fewer nothing can be told, which the service says by its
verdict, and the few such sets would rule the error quantiles of every rule.

The effect of a term is its coefficient on the polynomial that is orthonormal over the points (under the true weights),
in standard deviations of a reading: it is the noncentrality of the t-test of that term.
"""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cache
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import optimize, special, stats

Floats = npt.NDArray[np.float64]
Power = Literal["0.8", "0.99", "strong"]

HIGHEST = 8
GRID = 201  # points, even over the range, on which the error of a curve is taken
SPARE = 3  # readings beyond the coefficients of the true degree
SIZE = 0.05  # of the t-test by which effects are scaled
ERRORS: dict[str, float] = {
    "normal": 0.45,
    "t3": 0.10,
    "proportional, u known": 0.10,
    "proportional": 0.10,
    "rounded": 0.10,
    "nearly noise-free": 0.09,
    "outlier": 0.06,
}
NON_POLYNOMIAL = 0.2  # share of sets
# smooth curves on t from 0 to 1, with one parameter a from 0 to 1
CURVES: tuple[Callable[[Floats, float], Floats], ...] = (
    lambda t, a: np.exp((0.5 + 3 * a) * t),
    lambda t, a: np.log1p((1 + 30 * a) * t),
    lambda t, a: np.sqrt(t + 0.02 + 0.3 * a),
    lambda t, a: t / (0.1 + a + t),
    lambda t, a: np.tanh((1 + 2 * a) * (2 * t - 1)),
    lambda t, a: np.sin((1 + 3 * a) * t),
    lambda t, a: (t + 0.1) ** (1.2 + 0.6 * a),
)


@dataclass(frozen=True, kw_only=True, eq=False)
class Calibration:
    """One simulated dataset. `degree` is None for a curve that is no polynomial, `power` also for degree 0.

    weights: 1/variance where the uncertainties are known, else None. values: the true curve at the points; grid, truth:
    the true curve over the range.
    """

    x: Floats
    y: Floats
    values: Floats
    weights: Floats | None
    degree: int | None
    power: Power | None
    errors: str
    grid: Floats
    truth: Floats

    @property
    def highest(self) -> int:
        """The highest degree that the rules try."""
        return min(HIGHEST, np.unique(self.x).size - 1, self.x.size - 2)


def draw_many(count: int, seed: int) -> Iterator[Calibration]:
    """`count` sets, each from its own stream, so that set i is the same however many are drawn."""
    for stream in np.random.SeedSequence(seed).spawn(count):
        yield draw(np.random.default_rng(stream))


def draw(rng: np.random.Generator) -> Calibration:
    """One set: points, truth, errors."""
    x = _points(rng)
    errors = str(rng.choice(list(ERRORS), p=list(ERRORS.values())))
    sd = x / x.mean() if errors.startswith("proportional") else np.ones_like(x)
    grid = np.linspace(x.min(), x.max(), GRID)
    degree: int | None = None
    power: Power | None = None
    if rng.random() < NON_POLYNOMIAL:
        values, truth = _smooth(rng, x, grid)
    else:
        degree = int(rng.integers(0, min(4, np.unique(x).size - 2, x.size - 1 - SPARE) + 1))
        drawn: Power = ("0.8", "0.99", "strong")[int(rng.integers(3))]
        coefficients = _coefficients(rng, degree, drawn, x.size, quiet=errors == "nearly noise-free")
        power = drawn if degree else None  # a constant has no term that could be missed
        at_points, at_grid = orthonormal(x, sd, grid, degree)
        values, truth = at_points @ coefficients, at_grid @ coefficients
    y = values + sd * _noise(rng, errors, x.size)
    if errors == "rounded":
        step = float(np.exp(rng.uniform(np.log(0.5), np.log(2.5))))
        y = np.round(y / step) * step
    weights = 1 / sd**2 if errors == "proportional, u known" else None
    order = rng.permutation(x.size)
    return Calibration(
        x=x[order],
        y=y[order],
        values=values[order],
        weights=None if weights is None else weights[order],
        degree=degree,
        power=power,
        errors=errors,
        grid=grid,
        truth=truth,
    )


def _points(rng: np.random.Generator) -> Floats:
    """5 to 200 points, small sets as likely as large ones on a log scale; 1 to 5 readings a level, 4 levels or more."""
    n = int(round(np.exp(rng.uniform(np.log(5), np.log(200)))))
    repeats = int(rng.integers(1, min(5, n // 4) + 1))
    levels = n // repeats
    design = rng.integers(4)
    if design == 0:
        at = np.linspace(1, 10, levels)
    elif design == 1:
        at = np.geomspace(1, 10 ** rng.uniform(0.5, 1.5), levels)
    elif design == 2:
        at = rng.uniform(1, 10, levels)
    else:
        at = 1 + 9 * rng.beta(2, 2, levels)
    return np.repeat(np.sort(at), repeats)


def orthonormal(x: Floats, sd: Floats, grid: Floats, degree: int) -> tuple[Floats, Floats]:
    """Orthonormal polynomials 0..degree under weights 1/sd^2, at the points and on the grid."""

    def basis(at: Floats) -> Floats:
        return np.polynomial.chebyshev.chebvander((2 * at - x.min() - x.max()) / (x.max() - x.min()), degree)

    r = np.linalg.qr(basis(x) / sd[:, None], mode="r")
    inverse = np.linalg.inv(r)
    return basis(x) @ inverse, basis(grid) @ inverse


def _coefficients(rng: np.random.Generator, degree: int, power: Power, n: int, *, quiet: bool) -> Floats:
    """The leading effect as asked; lower terms of random sign and size, some of them too small to show."""
    lead = effect(power, n - degree - 1)
    if quiet:
        lead = 10 ** rng.uniform(3, 6)
    below = 2 * lead * rng.normal(size=degree)
    return np.concatenate((below, [lead * rng.choice((-1, 1))])) if degree else np.array([rng.normal() * 10])


@cache
def effect(power: Power, df: int) -> float:
    """Noncentrality at which the two-sided t-test at 5 % has the power asked; "strong" is twice that of 0.99."""
    if power == "strong":
        return 2 * effect("0.99", df)
    limit = float(stats.t.ppf(1 - SIZE / 2, df))

    def short(delta: float) -> float:
        return float(special.ncfdtr(1, df, delta**2, limit**2)) - (1 - float(power))

    top = limit
    while short(top) > 0:
        top *= 1.5
    return float(optimize.brentq(short, limit / 4, top))


def _smooth(rng: np.random.Generator, x: Floats, grid: Floats) -> tuple[Floats, Floats]:
    """A curve that is no polynomial; its span is 10 to 3000 standard deviations of a reading."""
    curve, a = CURVES[int(rng.integers(len(CURVES)))], float(rng.random())
    size = float(np.exp(rng.uniform(np.log(10), np.log(3000)))) * rng.choice((-1, 1))
    lo, hi = x.min(), x.max()
    span = np.ptp(curve(np.linspace(0, 1, GRID), a))
    return tuple(size / span * curve((at - lo) / (hi - lo), a) for at in (x, grid))  # type: ignore[return-value]


def _noise(rng: np.random.Generator, errors: str, n: int) -> Floats:
    if errors == "t3":
        return rng.standard_t(3, n) / np.sqrt(3)
    noise = rng.normal(size=n)
    if errors == "outlier":
        noise[rng.integers(n)] += rng.uniform(8, 20) * rng.choice((-1, 1))
    return noise
