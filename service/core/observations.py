"""One calibration's observations, validated once at the edge of the core."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from service.errors import FieldError, InvalidInput

Floats = npt.NDArray[np.float64]
Integers = npt.NDArray[np.intp]

LARGEST = 1e60  # squares of y over u stay finite, whatever is accepted,
SMALLEST = 1e-60  # and do not vanish


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Observations:
    """Validated data of one calibration, in the order measured.

    x, y: shape (n,), finite float64. u_x, u_y: standard uncertainties, positive, shape (n,) or None.
    series: label of the pass each point belongs to, or None. level: index of each point's level,
    0 for the lowest; level_x: mean x of each level, ascending. Build with `observe`.
    """

    x: Floats
    y: Floats
    u_x: Floats | None
    u_y: Floats | None
    series: tuple[str, ...] | None
    level: Integers
    level_x: Floats

    @property
    def n(self) -> int:
        """Number of points."""
        return self.x.size

    @property
    def levels(self) -> int:
        """Number of distinct levels of x."""
        return self.level_x.size


def observe(
    x: Sequence[float] | Floats,
    y: Sequence[float] | Floats,
    *,
    u_x: Sequence[float] | Floats | None = None,
    u_y: Sequence[float] | Floats | None = None,
    series: Sequence[str] | None = None,
    level_tolerance: float | None = None,
) -> Observations:
    """Validate and group into levels.

    Points belong to one level when their x are equal, or, with `level_tolerance` (unit of x), when
    they lie within that tolerance of the lowest x of the level. Raises InvalidInput naming each field.
    """
    bad: list[FieldError] = []
    xs = _column("/x", x, bad)
    ys = _column("/y", y, bad)
    uxs = None if u_x is None else _column("/u_x", u_x, bad, positive=True)
    uys = None if u_y is None else _column("/u_y", u_y, bad, positive=True)
    if bad:
        raise InvalidInput(bad)
    columns = (("/y", ys), ("/u_x", uxs), ("/u_y", uys), ("/series", series))
    for pointer, column in columns:
        if column is not None and len(column) != len(xs):
            bad.append(FieldError(pointer, f"has {len(column)} values where x has {len(xs)}"))
    if len(xs) < 3:
        bad.append(FieldError("/x", f"needs at least 3 points, has {len(xs)}"))
    if level_tolerance is not None and not (0 <= level_tolerance < LARGEST):
        bad.append(FieldError("/level_tolerance", "must be a finite number, 0 or more"))
    if bad:
        raise InvalidInput(bad)
    level, level_x = _levels(xs, level_tolerance or 0.0)
    return Observations(
        x=xs, y=ys, u_x=uxs, u_y=uys, series=None if series is None else tuple(series), level=level, level_x=level_x
    )


def _column(pointer: str, values: Sequence[float] | Floats, bad: list[FieldError], *, positive: bool = False) -> Floats:
    column = np.array(values, dtype=np.float64)
    if column.ndim != 1:
        bad.append(FieldError(pointer, "must be a flat list of numbers"))
        return column.ravel()
    size = np.abs(column)
    wrong = np.flatnonzero(~(size <= LARGEST))
    small = np.flatnonzero((size > 0) & (size < SMALLEST))
    if wrong.size:
        bad.append(FieldError(f"{pointer}/{wrong[0]}", f"must be finite and at most {LARGEST:g} in size"))
    elif small.size:
        bad.append(FieldError(f"{pointer}/{small[0]}", f"is closer to 0 than {SMALLEST:g} without being 0"))
    elif positive and (low := np.flatnonzero(~(column > 0))).size:
        bad.append(FieldError(f"{pointer}/{low[0]}", "must be greater than 0"))
    return column


def _levels(x: Floats, tolerance: float) -> tuple[Integers, Floats]:
    if tolerance == 0:
        level_x, level = np.unique(x, return_inverse=True)
        return level.astype(np.intp), level_x
    order = np.argsort(x, kind="stable")
    start, of_sorted, current = x[order[0]], np.empty(x.size, dtype=np.intp), 0
    for position, value in enumerate(x[order]):
        if value - start > tolerance:
            start, current = value, current + 1
        of_sorted[position] = current
    level = np.empty(x.size, dtype=np.intp)
    level[order] = of_sorted
    means = np.bincount(level, weights=x) / np.bincount(level)
    return level, means
