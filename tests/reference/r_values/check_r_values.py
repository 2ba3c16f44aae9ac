"""Checks the R values independently and writes exact_values.json and check_summary.json.

Least squares by the normal equations in 100-digit arithmetic gives coefficients, their standard errors, residual sums
of squares, leave-one-out and k-fold errors and lack of fit; statsmodels and scipy give the diagnostics.
Run: python check_r_values.py (needs mpmath, statsmodels, scipy)
"""

import csv
import json
import warnings
from fractions import Fraction
from pathlib import Path
from typing import Any

import mpmath
import numpy as np
import scipy.stats
import statsmodels.api as sm
from statsmodels.stats.diagnostic import het_breuschpagan
from statsmodels.stats.stattools import durbin_watson

mpmath.mp.dps = 100
HERE = Path(__file__).resolve().parent
WEIGHT_POWERS = {"weighted_1/x": 1, "weighted_1/x^2": 2, "weighted_1/x^1.5": mpmath.mpf(3) / 2}


class Worst:
    """Largest relative difference seen, by name of the quantity."""

    def __init__(self) -> None:
        self.by_name: dict[str, float] = {}

    def note(self, name: str, said: Any, found: Any, *, absolute: float = 0.0) -> None:
        a, b = mpmath.mpf(said), mpmath.mpf(found)
        off = abs(a - b)
        if off <= absolute:
            return
        self.by_name[name] = max(self.by_name.get(name, 0.0), float(off / max(abs(a), abs(b))))


def text(value: Any) -> str:
    return str(mpmath.nstr(value, 17))


def read(meta: dict[str, Any]) -> tuple[list[Any], list[Any]]:
    places = [HERE.parent / meta["source_csv"]] if "source_csv" in meta else []
    places += [HERE.parent / folder / meta["csv"] for folder in ("open_data", "handbook")]
    with next(p for p in places if p.exists()).open(newline="") as file:
        rows = list(csv.DictReader(file))

    def column(name: str) -> list[Any]:
        exact = [Fraction(row[name]) for row in rows]
        return [mpmath.mpf(v.numerator) / v.denominator for v in exact]

    return column("x"), column("y")


def moments(x: list[Any], y: list[Any], w: list[Any], top: int) -> tuple[list[Any], list[Any]]:
    """Sums of w x^k for k = 0..2 top, and of w x^k y for k = 0..top."""
    powers = [[v**k for v in x] for k in range(2 * top + 1)]
    plain = [sum(a * b for a, b in zip(w, p, strict=True)) for p in powers]
    with_y = [sum(a * b * c for a, b, c in zip(w, powers[k], y, strict=True)) for k in range(top + 1)]
    return plain, with_y


def solve(plain: list[Any], with_y: list[Any], degree: int) -> tuple[Any, Any]:
    size = range(degree + 1)
    inverse = mpmath.matrix([[plain[i + j] for j in size] for i in size]) ** -1
    return inverse, inverse * mpmath.matrix(with_y[: degree + 1])


def errors(x: list[Any], y: list[Any], b: Any) -> list[Any]:
    return [v - sum(b[k] * u**k for k in range(len(b))) for u, v in zip(x, y, strict=True)]


def leave_one_out(x: list[Any], e: list[Any], inverse: Any) -> Any:
    total = mpmath.mpf(0)
    for u, v in zip(x, e, strict=True):
        p = [u**k for k in range(inverse.rows)]
        h = sum(inverse[i, j] * p[i] * p[j] for i in range(inverse.rows) for j in range(inverse.rows))
        total += (v / (1 - h)) ** 2
    return total / len(x)


def k_fold(x: list[Any], y: list[Any], plain: list[Any], with_y: list[Any], fold: list[int], degree: int) -> Any:
    total = mpmath.mpf(0)
    for f in sorted(set(fold)):
        out = [i for i, g in enumerate(fold) if g == f]
        xs, ys = [x[i] for i in out], [y[i] for i in out]
        less, less_y = moments(xs, ys, [mpmath.mpf(1)] * len(out), degree)
        _, b = solve(
            [plain[k] - less[k] for k in range(2 * degree + 1)],
            [with_y[k] - less_y[k] for k in range(degree + 1)],
            degree,
        )
        total += sum(v * v for v in errors(xs, ys, b))
    return mpmath.sqrt(total / len(x))


def lack_of_fit(x: list[Any], y: list[Any], rss: Any, degree: int) -> tuple[Any, int, int]:
    groups: dict[Any, list[Any]] = {}
    for u, v in zip(x, y, strict=True):
        groups.setdefault(u, []).append(v)
    pure = sum(sum((v - sum(g) / len(g)) ** 2 for v in g) for g in groups.values())
    df, df_pure = len(groups) - degree - 1, len(x) - len(groups)
    return ((rss - pure) / df) / (pure / df_pure), df, df_pure


def check_degrees(meta: dict[str, Any], x: list[Any], y: list[Any], worst: Worst) -> list[dict[str, Any]]:
    n, top = len(x), meta["max_degree"]
    fold = meta.get("fold", {}).get("assignment_1based_in_data_order")
    plain, with_y = moments(x, y, [mpmath.mpf(1)] * n, top)
    mean = sum(y) / n
    tss = sum((v - mean) ** 2 for v in y)
    answers = []
    for said in meta["degrees"]:
        degree = said["degree"]
        inverse, b = solve(plain, with_y, degree)
        e = errors(x, y, b)
        rss = sum(v * v for v in e)
        variance = rss / (n - degree - 1)
        answer = {
            "degree": degree,
            # a value below 1e-60 is zero by symmetry
            "coef": ["0" if abs(v) < mpmath.mpf("1e-60") else text(v) for v in b],
            "coef_se": [text(mpmath.sqrt(variance * inverse[k, k])) for k in range(degree + 1)],
            "rss": text(rss),
            "r2": text(1 - rss / tss),
        }
        for k in range(degree + 1):
            if answer["coef"][k] != "0":
                worst.note("coef", said["coef"][k], b[k])
        worst.note("rss", said["rss"], rss)
        worst.note("r2", said["r2"], 1 - rss / tss, absolute=1e-14)
        worst.note("sigma", said["sigma"], mpmath.sqrt(variance))
        likelihood = -mpmath.mpf(n) / 2 * (mpmath.log(2 * mpmath.pi) + mpmath.log(rss / n) + 1)
        worst.note("aic", said["aic"], -2 * likelihood + 2 * (degree + 2))
        worst.note("bic", said["bic"], -2 * likelihood + mpmath.log(n) * (degree + 2))
        if "loocv" in said:
            value = leave_one_out(x, e, inverse)
            answer["loocv_mse"] = text(value)
            worst.note("loocv_mse", said["loocv"]["mse"], value)
        if "kfold" in said:
            value = k_fold(x, y, plain, with_y, fold, degree)
            answer["kfold_rmse_pooled"] = text(value)
            worst.note("kfold_rmse", said["kfold"]["rmse_pooled"], value)
        if "lack_of_fit" in said:
            f, df, df_pure = lack_of_fit(x, y, rss, degree)
            answer["lack_of_fit_f"] = text(f)
            worst.note("lack_of_fit_f", said["lack_of_fit"]["f"], f)
            worst.note(
                "lack_of_fit_p", said["lack_of_fit"]["p"], scipy.stats.f.sf(float(f), df, df_pure), absolute=1e-300
            )
        answers.append(answer)
    left = [mpmath.mpf(a["rss"]) for a in answers]
    for degree, said in enumerate(meta["anova_sequential_vs_largest"], start=1):
        f = (left[degree - 1] - left[degree]) / (left[top] / (n - top - 1))
        worst.note("anova_f", said["f"], f, absolute=1e-9)
    return answers


def check_weighted(
    said: dict[str, Any], x: list[Any], y: list[Any], w: list[Any], worst: Worst
) -> list[dict[str, Any]]:
    plain, with_y = moments(x, y, w, said["max_degree"])
    answers = []
    for one in said["degrees"]:
        _, b = solve(plain, with_y, one["degree"])
        rss = sum(a * v * v for a, v in zip(w, errors(x, y, b), strict=True))
        answers.append({"degree": one["degree"], "coef": [text(v) for v in b], "weighted_rss": text(rss)})
        for k, value in enumerate(b):
            worst.note("weighted_coef", one["coef"][k], value)
        worst.note("weighted_rss", one["rss"], rss)
    return answers


def check_diagnostics(meta: dict[str, Any], x: list[Any], y: list[Any], worst: Worst) -> None:
    xs, ys = np.array([float(v) for v in x]), np.array([float(v) for v in y])
    u = (xs - (xs.max() + xs.min()) / 2) / ((xs.max() - xs.min()) / 2)
    for said in meta.get("diagnostics", []):
        degree = said["degree"]
        basis = np.vander(u, degree + 1, increasing=True)
        fit = sm.OLS(ys, basis).fit(method="qr")
        if "breusch_pagan_studentised" in said:
            lm = het_breuschpagan(fit.resid, basis)[0]
            worst.note("breusch_pagan", said["breusch_pagan_studentised"]["lm"], lm, absolute=1e-12)
        worst.note("durbin_watson", said["durbin_watson_data_order"]["dw"], durbin_watson(fit.resid))
        if "shapiro_wilk" in said:
            worst.note("shapiro_w", said["shapiro_wilk"]["w"], scipy.stats.shapiro(fit.resid)[0])
        if "reset_power_2_3_fitted" in said:
            f = (fit.fittedvalues - fit.fittedvalues.mean()) / fit.fittedvalues.std()
            more = sm.OLS(ys, np.column_stack([basis, f**2, f**3])).fit(method="qr")
            value = (fit.ssr - more.ssr) / 2 / (more.ssr / (xs.size - degree - 3))
            worst.note("reset_f", said["reset_power_2_3_fitted"]["f"], value)
        if "max_hat" in said:
            influence = fit.get_influence()
            worst.note("max_hat", said["max_hat"]["value"], influence.hat_matrix_diag.max())
            if said["max_hat"]["value"] < 1 - 1e-9:
                t = influence.resid_studentized_external
                largest = said["max_abs_external_studentised_residual"]["value"]
                worst.note("max_studentised", largest, t[np.argmax(np.abs(t))])
                worst.note("max_cook", said["max_cook"]["value"], np.nanmax(influence.cooks_distance[0]))


def main() -> None:
    warnings.simplefilter("ignore")  # perfect fits and leverages of 1 are meant to be here
    exact: dict[str, Any] = {}
    summary: dict[str, Any] = {}
    for path in sorted(HERE.glob("*.json")):
        meta = json.loads(path.read_text())
        if "degrees" not in meta:
            continue
        x, y = read(meta)
        worst = Worst()
        values: dict[str, Any] = {"degrees": check_degrees(meta, x, y, worst)}
        for key, power in WEIGHT_POWERS.items():
            if key in meta:
                values[key] = check_weighted(meta[key], x, y, [v**-power for v in x], worst)
        check_diagnostics(meta, x, y, worst)
        exact[meta["dataset"]] = values
        summary[meta["dataset"]] = {k: float(f"{v:.1e}") for k, v in worst.by_name.items()}
        print(meta["dataset"], summary[meta["dataset"]], flush=True)
    (HERE / "exact_values.json").write_text(json.dumps(exact, indent=0))
    meaning = "largest relative difference between R and the independent value over all degrees"
    (HERE / "check_summary.json").write_text(json.dumps({"meaning": meaning, "datasets": summary}, indent=1))


if __name__ == "__main__":
    main()
