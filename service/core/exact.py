"""Correctly rounded numbers of the chosen curve, by exact integer arithmetic on the data as given.

A double is an integer times a power of two, so the normal equations have integer entries. A
fraction-free Gauss-Jordan elimination (Bareiss, Math. Comp. 22 (1968) 565) solves them without any
rounding; each number is rounded once, when it leaves as a double. The border row of y yields the
residual sum of squares of every lower degree on the way.
"""

import math
from collections.abc import Sequence
from dataclasses import dataclass
from operator import mul

from service.core.observations import Floats

MOST_POINTS = 20_000
MOST_BITS = 40_000  # of one moment: beyond it the elimination takes longer than its digits are worth


@dataclass(frozen=True, kw_only=True, slots=True)
class ExactFit:
    """The least-squares fit of one degree, each number within one unit in the last place or exact.

    power, power_sd: by power 0..degree; None where no double can hold the value (sd also without
    spare degrees of freedom). t likewise, None for an exact fit. chebyshev: on T_0..T_degree.
    rss_below: by degree, of each lower degree and this one (from 0, or from 1 without intercept).
    """

    power: tuple[float | None, ...]
    power_sd: tuple[float | None, ...]
    t: tuple[float | None, ...]
    chebyshev: tuple[float, ...]
    rss_below: tuple[float, ...]
    rss: float
    r2: float | None
    f: float | None


def exact_fit(
    x: Floats, y: Floats, weights: Floats, degree: int, *, intercept: bool, domain: tuple[float, float]
) -> ExactFit | None:
    """Solve exactly; None where n or the number of digits make that too dear.

    x, y, weights: (n,) finite; weights > 0, taken at their double value (1/variance up to a factor).
    domain: what the Chebyshev coefficients are over.
    """
    if x.size > MOST_POINTS or degree == 0 and not intercept:
        return None
    xs, x_shift = _integers([*x.tolist(), *domain])
    ys, y_shift = _integers(y.tolist())
    common = math.gcd(*xs)
    *us, low, high = (v // common for v in xs)
    equal = bool((weights == weights[0]).all())
    w0 = float(weights[0]) if equal else 1.0
    ws, w_shift = ([1] * len(us), 0) if equal else _integers(weights.tolist())
    bits = 2 * degree * max(map(int.bit_length, us)) + max(map(int.bit_length, ws)) + 64
    if bits > MOST_BITS or max(map(int.bit_length, ys)) > MOST_BITS:
        return None
    first = 0 if intercept else 1
    matrix, total = _normal_equations(us, ys, ws, first, degree)
    solved = _Solved.of(matrix)
    n, p = len(us), degree + 1 - first
    df = n - p
    det, rss = solved.det, solved.rss[-1]
    scale = _Scale(common=common, x_shift=x_shift, y_shift=y_shift, w_shift=w_shift, w0=w0)
    power: list[float | None] = [0.0] * first
    sd: list[float | None] = [None] * first
    t: list[float | None] = [None] * first
    for k in range(p):
        b, inverse = solved.solution[k], solved.inverse_diagonal[k]
        power.append(scale.coefficient(b, det, first + k))
        sd.append(scale.deviation(rss * inverse, det * det * df, first + k) if df > 0 else None)
        t.append(_root_ratio(b * b * df, rss * inverse, negative=b < 0) if df > 0 and rss > 0 else None)
    explained = total[0] * det - rss * total[1]  # (TSS - RSS) det total[1]
    return ExactFit(
        power=tuple(power),
        power_sd=tuple(sd),
        t=tuple(t),
        chebyshev=_chebyshev(solved.solution, det, first, (low, high), scale),
        rss_below=tuple(scale.sum_of_squares(r, d) for r, d in zip(solved.rss, solved.dets, strict=True)),
        rss=scale.sum_of_squares(rss, det),
        r2=_ratio(explained, total[0] * det) if total[0] else None,
        f=_ratio(explained * df, rss * total[1] * degree) if degree and df > 0 and rss > 0 else None,
    )


@dataclass(frozen=True, kw_only=True, slots=True)
class _Scale:
    """How integer units go back: u = x 2^x_shift / common, v = y 2^y_shift, weights likewise times w0."""

    common: int
    x_shift: int
    y_shift: int
    w_shift: int
    w0: float

    def coefficient(self, top: int, bottom: int, power: int) -> float | None:
        return _ratio(*_shift(top, bottom * self.common**power, self.x_shift * power - self.y_shift))

    def deviation(self, top: int, bottom: int, power: int) -> float | None:
        shifted = _shift(top, bottom * self.common ** (2 * power), 2 * (self.x_shift * power - self.y_shift))
        return _root_ratio(*shifted, negative=False)

    def sum_of_squares(self, top: int, bottom: int) -> float:
        value = _ratio(*_shift(top, bottom, -2 * self.y_shift - self.w_shift))
        return (value or 0.0) * self.w0


@dataclass(frozen=True, kw_only=True, slots=True)
class _Solved:
    """Everything over its determinant: solution/det, inverse_diagonal/det; rss[k]/dets[k] by degree."""

    solution: list[int]
    inverse_diagonal: list[int]
    det: int
    rss: list[int]
    dets: list[int]

    @classmethod
    def of(cls, m: list[list[int]]) -> "_Solved":
        """Fraction-free Gauss-Jordan in place; the last row and column hold y and are never pivots."""
        size = len(m)
        previous = 1
        rss, dets = [], []
        for k in range(size - 1):
            pivot_row, pivot = m[k], m[k][k]
            for i in range(size):
                if i == k:
                    continue
                row, factor = m[i], m[i][k]
                row[:] = [(pivot * a - factor * b) // previous for a, b in zip(row, pivot_row, strict=True)]
                row[k] = -factor
            pivot_row[k] = previous
            previous = pivot
            rss.append(m[-1][-1])
            dets.append(pivot)
        last = size - 1
        return cls(
            solution=[m[k][last] for k in range(last)],
            inverse_diagonal=[m[k][k] for k in range(last)],
            det=previous,
            rss=rss,
            dets=dets,
        )


def _integers(values: Sequence[float]) -> tuple[list[int], int]:
    """values[i] = integer[i] / 2^shift, exactly."""
    ratios = [v.as_integer_ratio() for v in values]
    shift = max(b.bit_length() for _, b in ratios) - 1
    return [a << (shift - b.bit_length() + 1) for a, b in ratios], shift


def _normal_equations(
    us: list[int], ys: list[int], ws: list[int], first: int, degree: int
) -> tuple[list[list[int]], tuple[int, int]]:
    """The bordered moment matrix, and the total sum of squares as (top, bottom)."""
    moments, with_y = [], []
    row = list(ws)
    for k in range(2 * degree + 1):
        moments.append(sum(row))
        if k <= degree:
            with_y.append(sum(map(mul, row, ys)))
        if k < 2 * degree:
            row = list(map(mul, row, us))
    y_squares = sum(map(mul, map(mul, ws, ys), ys))
    powers = range(first, degree + 1)
    matrix = [[moments[i + j] for j in powers] + [with_y[i]] for i in powers]
    matrix.append([with_y[j] for j in powers] + [y_squares])
    total = (y_squares * moments[0] - with_y[0] ** 2, moments[0]) if first == 0 else (y_squares, 1)
    return matrix, total


def _chebyshev(solution: list[int], det: int, first: int, ends: tuple[int, int], scale: _Scale) -> tuple[float, ...]:
    """Exact change of basis: Horner's scheme in u = (2M + 2H t)/4 with 2t T_j = T_{j+1} + T_|j-1|."""
    low, high = ends
    twice_middle, half = 2 * (low + high), high - low
    coefficients = [0] * first + solution
    degree = len(coefficients) - 1
    series = [coefficients[-1]]
    unit = 1
    for c in reversed(coefficients[:-1]):
        unit *= 4
        up = [twice_middle * s for s in series] + [0]
        for j, s in enumerate(series):
            up[j + 1] += half * s
            up[abs(j - 1)] += half * s
        up[0] += c * unit
        series = up
    out = [_ratio(*_shift(s, det << (2 * degree), -scale.y_shift)) for s in series]
    return tuple(0.0 if v is None else v for v in out)


def _shift(top: int, bottom: int, power: int) -> tuple[int, int]:
    return (top << power, bottom) if power >= 0 else (top, bottom << -power)


def _ratio(top: int, bottom: int) -> float | None:
    """top/bottom, correctly rounded; None where a double cannot hold it."""
    try:
        value = top / bottom
    except OverflowError:
        return None
    return None if value == 0 and top != 0 else value


def _root_ratio(top: int, bottom: int, *, negative: bool) -> float | None:
    """The square root of top/bottom, rounded once more than exact; None where a double cannot hold it."""
    if top == 0:
        return 0.0
    # scale by a power of four so that the ratio itself cannot leave the range of a double
    shift = (top.bit_length() - bottom.bit_length()) // 2
    scaled = (top, bottom << (2 * shift)) if shift >= 0 else (top << (-2 * shift), bottom)
    value = _ratio(*scaled)
    try:
        root = math.ldexp(math.sqrt(value), shift) if value is not None else 0.0
    except OverflowError:
        return None
    if root == 0:
        return None
    return -root if negative else root
