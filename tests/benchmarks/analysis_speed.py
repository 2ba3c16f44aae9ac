"""The whole analysis against common tools on the same data in the same run: ratios of medians, calls interleaved.

Times are of the processor, so that other work on the machine matters less.

python -m tests.benchmarks.analysis_speed --points 30 --rounds 30
"""

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # one core, as a worker has

import argparse
import time
from collections.abc import Callable

import numpy as np
import statsmodels.api as sm
from scipy import stats
from sklearn.linear_model import LinearRegression
from sklearn.model_selection import GridSearchCV, RepeatedKFold
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import PolynomialFeatures
from statsmodels.stats.diagnostic import het_breuschpagan, linear_reset
from statsmodels.stats.outliers_influence import OLSInfluence
from statsmodels.stats.stattools import durbin_watson, jarque_bera

from service.core.analysis import analyse
from service.core.cross_validation import cross_validate
from service.core.folds import make_folds
from service.core.nested import fit_all
from service.core.observations import observe
from service.core.plan import Plan
from tests.benchmarks.calibrations import Floats

TOP = 6
FOLDS = RepeatedKFold(n_splits=10, n_repeats=10, random_state=0)


def statsmodels_diagnostics(x: Floats, y: Floats, degree: int) -> None:
    """What the same fit is checked for by hand: one degree, no cross-validation, no choice."""
    design = np.vander(x, degree + 1, increasing=True)
    fit = sm.OLS(y, design).fit()
    fit.summary()
    influence = OLSInfluence(fit)
    influence.summary_frame()  # Cook's distance, DFFITS, DFBETAS, studentised residuals, by leaving points out
    fit.outlier_test()
    het_breuschpagan(fit.resid, design)
    linear_reset(fit, power=3, use_f=True)
    durbin_watson(fit.resid)
    durbin_watson(fit.resid[np.argsort(x)])
    jarque_bera(fit.resid)
    stats.shapiro(fit.resid)
    higher = sm.OLS(y, np.vander(x, degree + 4, increasing=True)).fit()
    higher.compare_f_test(fit)


def refits_by_lstsq(x: Floats, y: Floats) -> None:
    """Every degree on the same folds with numpy, each fitted anew on scaled x."""
    t = 2 * (x - x.min()) / np.ptp(x) - 1
    design = np.polynomial.chebyshev.chebvander(t, TOP)
    for train, out in FOLDS.split(x):
        for degree in range(TOP + 1):
            b = np.linalg.lstsq(design[train, : degree + 1], y[train])[0]
            np.sum((y[out] - design[out, : degree + 1] @ b) ** 2)


def refits_by_grid_search(x: Floats, y: Floats) -> None:
    """Every degree on the same folds with scikit-learn's grid search."""
    t = 2 * (x - x.min()) / np.ptp(x) - 1
    model = make_pipeline(PolynomialFeatures(include_bias=False), LinearRegression())
    degrees = {"polynomialfeatures__degree": list(range(1, TOP + 1))}
    GridSearchCV(model, degrees, cv=FOLDS, scoring="neg_mean_squared_error").fit(t[:, None], y)


def exact_cross_validation(x: Floats, y: Floats) -> None:
    """Every degree on the same folds as the service does it, the factorisation included."""
    observations = observe(x, y)
    cross_validate(fit_all(x, y, np.ones_like(x), top=TOP), make_folds(observations, Plan().resampling))


def medians(calls: dict[str, Callable[[], object]], rounds: int, repeats: int = 5) -> dict[str, float]:
    """Median processor seconds of each call, each called `repeats` times in a row in each round."""
    for call in calls.values():
        call()
    taken: dict[str, list[float]] = {name: [] for name in calls}
    for _ in range(rounds):
        for name, call in calls.items():
            for _ in range(repeats):
                start = time.process_time()
                call()
                taken[name].append(time.process_time() - start)
    return {name: float(np.median(values)) for name, values in taken.items()}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--points", type=int, default=30)
    parser.add_argument("--rounds", type=int, default=30)
    parser.add_argument("--grid-search", action="store_true", help="also scikit-learn's grid search: seconds a round")
    asked = parser.parse_args()
    rng = np.random.default_rng(1)
    x = np.linspace(1, 10, asked.points)
    y = 2 + 3 * x - 0.1 * x * x + 0.05 * rng.normal(size=x.size)
    observations, plan = observe(x, y), Plan(max_degree=TOP)
    calls: dict[str, Callable[[], object]] = {
        "whole analysis": lambda: analyse(observations, plan),
        "statsmodels diagnostics of one degree": lambda: statsmodels_diagnostics(x, y, 2),
        "10x10 cross-validation, exact": lambda: exact_cross_validation(x, y),
        "10x10 cross-validation, numpy lstsq refits": lambda: refits_by_lstsq(x, y),
    }
    if asked.grid_search:
        calls["10x10 cross-validation, scikit-learn grid search"] = lambda: refits_by_grid_search(x, y)
    found = medians(calls, asked.rounds)
    print(f"{asked.points} points, degrees to {TOP}; median of {asked.rounds} rounds")
    for name, seconds in found.items():
        base = "10x10 cross-validation, exact" if name.startswith("10x10") else "whole analysis"
        print(f"{name:50}{1e3 * seconds:10.2f} ms{seconds / found[base]:10.1f} times {base}")


if __name__ == "__main__":
    main()
