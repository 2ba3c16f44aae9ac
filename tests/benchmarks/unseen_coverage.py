"""How often the unseen bend covers the largest systematic error that the chosen curve truly has.

python -m tests.benchmarks.unseen_coverage --sets 8000 --seed 3

The systematic error is the true curve less its own fit of the chosen degree to the same points: what would be left if
every level were read for ever. Largest over the range of the points. For comparison, the largest effect of the next two
terms alone.
"""

import argparse
from dataclasses import dataclass, field

import numpy as np

from service.core.analysis import analyse
from service.core.observations import observe
from service.core.plan import Plan, Resampling
from service.core.result import Result
from tests.benchmarks.calibrations import Calibration, Floats, draw_many


@dataclass
class Covered:
    """For each set: whether the bound, and the two-term bound, covered the error; and the bound in single readings."""

    whole: list[bool] = field(default_factory=list)
    two_terms: list[bool] = field(default_factory=list)
    size: list[float] = field(default_factory=list)


def systematic_error(data: Calibration, found: Result) -> float:
    """Largest over the grid. The weights are those that the analysis used."""
    weights = {"1/x": 1 / data.x, "1/x^2": 1 / data.x**2, "u_y": data.weights}.get(found.weights.used)
    root = np.ones_like(data.x) if weights is None else np.sqrt(weights)
    truth_at_points = data.values
    b = np.linalg.lstsq(basis(data, data.x, found) * root[:, None], root * truth_at_points)[0]
    return float(np.max(np.abs(basis(data, data.grid, found) @ b - data.truth)))


def basis(data: Calibration, at: Floats, found: Result) -> Floats:
    lo, hi = data.x.min(), data.x.max()
    return np.polynomial.chebyshev.chebvander((2 * at - lo - hi) / (hi - lo), found.chosen_degree)


def run(sets: int, seed: int) -> tuple[Covered, Covered]:
    """Polynomial truths chosen too low, and truths that are no polynomials."""
    too_low, smooth = Covered(), Covered()
    for data in draw_many(sets, seed):
        u_y = None if data.weights is None else 1 / np.sqrt(data.weights)
        plan = Plan(min_degree=0, max_degree=data.highest, resampling=Resampling(scheme="leave_one_out"))
        found = analyse(observe(data.x, data.y, u_y=u_y), plan)
        kind = smooth if data.degree is None else too_low if found.chosen_degree < data.degree else None
        bend = found.unseen_bend
        if kind is None or bend.y is None:
            continue
        error = systematic_error(data, found)
        kind.whole.append(bend.y >= error)
        kind.two_terms.append(max(t.largest_effect for t in bend.terms[:2]) >= error)
        if bend.in_single_readings is not None:
            kind.size.append(bend.in_single_readings)
    return too_low, smooth


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--sets", type=int, default=8000)
    parser.add_argument("--seed", type=int, default=3)
    asked = parser.parse_args()
    for name, kind in zip(("chosen too low", "no polynomial"), run(asked.sets, asked.seed), strict=True):
        whole, two = 100 * np.mean(kind.whole), 100 * np.mean(kind.two_terms)
        print(f"{name:16}{len(kind.whole):6} sets   covered {whole:5.1f} %   by two terms alone {two:5.1f} %")
        print(f"{'':16}median {np.median(kind.size):.1f} times the scatter of one reading")


if __name__ == "__main__":
    main()
