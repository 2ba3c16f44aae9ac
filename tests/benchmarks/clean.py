"""How often a clean calibration carries a caution: normal errors, enough levels, and the right degree chosen.

python -m tests.benchmarks.clean --sets 2000 --seed 1
"""

import argparse
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from service.core.analysis import analyse
from service.core.observations import observe
from service.core.plan import Plan
from service.core.result import Result
from tests.benchmarks.calibrations import Floats, effect, orthonormal


@dataclass(frozen=True)
class CleanRate:
    """`sets` with the right degree; `cautions`: those with a caution or worse, by code; `drawn`: all sets."""

    drawn: int
    sets: int
    with_caution: int
    cautions: Counter[str]

    @property
    def rate(self) -> float:
        return self.with_caution / self.sets


def draw(rng: np.random.Generator) -> tuple[Floats, Floats, int]:
    """x, y in random order, and the true degree: 1 to 3, its leading effect twice that of power 0.99.

    8 to 40 even levels from 1 to 10, each read one to three times.
    """
    levels, repeats, degree = int(rng.integers(8, 41)), int(rng.integers(1, 4)), int(rng.integers(1, 4))
    x = np.repeat(np.linspace(1, 10, levels), repeats)
    basis, _ = orthonormal(x, np.ones_like(x), x, degree)
    lead = effect("strong", x.size - degree - 1)
    size = np.append(rng.normal(size=degree) * 3 * lead, lead * rng.choice((-1, 1)))
    size[1] = abs(size[1])
    first, rises = np.unique(x, return_index=True)[1], basis @ size
    while np.diff(rises[first]).min() < 0.25 * np.diff(rises[first]).mean():  # clear of flat, as a calibration is
        size[1] = 1.5 * size[1] + lead
        rises = basis @ size
    order = rng.permutation(x.size)
    return x[order], (rises + rng.normal(size=x.size))[order], degree


def analyses(sets: int, seed: int) -> Iterator[tuple[Result, int]]:
    """The default plan on each set, with the true degree."""
    for stream in np.random.SeedSequence(seed).spawn(sets):
        x, y, degree = draw(np.random.default_rng(stream))
        yield analyse(observe(x, y), Plan()), degree


def run(sets: int, seed: int) -> CleanRate:
    cautions: Counter[str] = Counter()
    right = with_caution = 0
    for found, degree in analyses(sets, seed):
        if found.chosen_degree != degree:
            continue
        right += 1
        codes = {w.code for w in found.warnings if w.severity != "note"}
        cautions.update(codes)
        with_caution += bool(codes)
    return CleanRate(sets, right, with_caution, cautions)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--sets", type=int, default=2000)
    parser.add_argument("--seed", type=int, default=1)
    asked = parser.parse_args()
    found = run(asked.sets, asked.seed)
    print(f"{found.sets} of {found.drawn} sets with the right degree; {100 * found.rate:.1f} % carry a caution")
    for code, count in found.cautions.most_common():
        print(f"{code:32}{100 * count / found.sets:5.2f} %")


if __name__ == "__main__":
    main()
