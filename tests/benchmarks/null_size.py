"""Chance of a term too many when there is none, simulated, against 1 - prod(1 - alpha_k).

python -m tests.benchmarks.null_size --sets 100000

Even levels, normal errors, a constant truth, degrees to 6, no point screen (the formula is for the walk alone).
"""

import argparse

import numpy as np

from service.core.least_bend import gap_factors, gap_ratios, size_under_null, term_p_values, walk_many
from service.core.nested import fit_all

TOP = 6


def sizes(n: int, sets: int, seed: int = 1) -> tuple[float, float]:
    """Predicted and observed chance for n points."""
    x = np.linspace(0, 1, n)
    top = min(TOP, n - 2)
    fits = fit_all(x, np.zeros(n), np.ones(n), top=top)
    factors = gap_factors(gap_ratios(fits))
    y = np.random.default_rng([seed, n]).normal(size=(sets, n))
    on_terms = (y @ fits.q) ** 2
    rss = np.sum(y * y, axis=1)[:, None] - np.cumsum(on_terms, axis=1)
    p = term_p_values(rss, np.broadcast_to(fits.all_df(), rss.shape), 0.0, known_uncertainty=False)
    chosen = walk_many(p, factors, np.full(sets, float(n)))
    return size_under_null(factors.tolist(), n, 0), float(np.mean(chosen > 0))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--sets", type=int, default=100_000)
    asked = parser.parse_args()
    for n in (6, 8, 15, 30, 60, 200):
        predicted, observed = sizes(n, asked.sets)
        print(f"n = {n:4}   predicted {predicted:.4f}   observed {observed:.4f}")


if __name__ == "__main__":
    main()
