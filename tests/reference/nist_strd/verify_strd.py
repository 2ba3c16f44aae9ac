"""Checks the certified StRD values without floating point and writes verification.json.

Solves the normal equations of every <name>.csv in exact rational arithmetic, takes square roots with 80 digits
and compares every certified number of <name>.json. Run: python verify_strd.py (needs mpmath)
"""

import csv
import json
from fractions import Fraction
from pathlib import Path
from typing import Any

import mpmath

mpmath.mp.dps = 80
HERE = Path(__file__).resolve().parent
ANOVA = ("regression_ss", "regression_ms", "f_statistic", "residual_ss", "residual_ms")


def real(value: Fraction) -> Any:
    return mpmath.mpf(value.numerator) / value.denominator


def inverse(matrix: list[list[Fraction]]) -> list[list[Fraction]]:
    """Gauss-Jordan elimination over the rationals."""
    size = len(matrix)
    work = [row + [Fraction(int(i == j)) for j in range(size)] for i, row in enumerate(matrix)]
    for c in range(size):
        pivot = next(r for r in range(c, size) if work[r][c] != 0)
        work[c], work[pivot] = work[pivot], work[c]
        work[c] = [v / work[c][c] for v in work[c]]
        for r in range(size):
            if r != c and work[r][c] != 0:
                factor = work[r][c]
                work[r] = [u - factor * v for u, v in zip(work[r], work[c], strict=True)]
    return [row[size:] for row in work]


def solve(meta: dict[str, Any], rows: list[list[str]]) -> dict[str, Any]:
    """Every certified quantity, exactly."""
    y = [Fraction(row[0]) for row in rows]
    powers = range(0 if meta["intercept"] else 1, meta["degree"] + 1)
    design = [[Fraction(row[1]) ** k for k in powers] for row in rows]
    n, m = len(design), len(powers)
    normal = [[sum(r[i] * r[j] for r in design) for j in range(m)] for i in range(m)]
    right = [sum(r[i] * v for r, v in zip(design, y, strict=True)) for i in range(m)]
    inverted = inverse(normal)
    b = [sum(inverted[i][j] * right[j] for j in range(m)) for i in range(m)]
    residuals = [v - sum(c * x for c, x in zip(b, r, strict=True)) for r, v in zip(design, y, strict=True)]
    rss = sum(e * e for e in residuals)
    mean = sum(y) / n if meta["intercept"] else 0
    tss = sum((v - mean) ** 2 for v in y)
    regression_df = m - 1 if meta["intercept"] else m
    variance = rss / (n - m)
    regression_ms = (tss - rss) / regression_df
    return {
        "coefficients": [real(v) for v in b],
        "coefficient_sd": [mpmath.sqrt(real(variance * inverted[i][i])) for i in range(m)],
        "residual_sd": mpmath.sqrt(real(variance)),
        "r_squared": real(1 - rss / tss),
        "regression_df": regression_df,
        "residual_df": n - m,
        "regression_ss": real(tss - rss),
        "regression_ms": real(regression_ms),
        "residual_ss": real(rss),
        "residual_ms": real(variance),
        "f_statistic": mpmath.inf if rss == 0 else real(regression_ms / variance),
    }


def agreement(certified: str, exact: Any) -> float:
    """Significant digits in common; 15 means equal after rounding."""
    if certified == "Infinity":
        return 15.0 if mpmath.isinf(exact) else 0.0
    value = mpmath.mpf(certified)
    if exact == 0 or value == 0:
        return 15.0 if value == exact else 0.0
    if mpmath.nstr(value, 15) == mpmath.nstr(exact, 15):
        return 15.0
    return float(-mpmath.log10(abs(value - exact) / abs(exact)))


def verify(path: Path) -> tuple[str, dict[str, Any]]:
    meta = json.loads(path.read_text())
    with path.with_suffix(".csv").open(newline="") as file:
        rows = list(csv.reader(file))[1:]
    exact, certified = solve(meta, rows), meta["certified"]
    digits = {}
    for key in ("coefficients", "coefficient_sd"):
        for name, text, value in zip(meta["parameters"], certified[key], exact[key], strict=True):
            digits[f"{key}.{name}"] = agreement(text, value)
    for key in ("residual_sd", "r_squared"):
        digits[key] = agreement(certified[key], exact[key])
    for key in ANOVA:
        digits[f"anova.{key}"] = agreement(certified["anova"][key], exact[key])
    df = (certified["anova"]["regression_df"], certified["anova"]["residual_df"])
    worst = min(digits, key=lambda k: digits[k])
    twenty = {key: [mpmath.nstr(v, 20) for v in exact[key]] for key in ("coefficients", "coefficient_sd")}
    twenty |= {k: mpmath.nstr(exact[k], 20) for k in ("residual_sd", "r_squared", "residual_ss", "f_statistic")}
    return meta["dataset"], {
        "n": len(rows),
        "values_checked": len(digits),
        "df_ok": df == (exact["regression_df"], exact["residual_df"]),
        "min_digits": round(digits[worst], 2),
        "worst": worst,
        "all_15_digits": all(v == 15 for v in digits.values()),
        "below_15": {k: round(v, 2) for k, v in digits.items() if v < 15},
        "exact_20_digits": twenty,
    }


def main() -> None:
    found = dict(verify(p) for p in sorted(HERE.glob("*.json")) if p.with_suffix(".csv").exists())
    for name, answer in found.items():
        print(name, answer["values_checked"], "values, least digits", answer["min_digits"], answer["below_15"])
    (HERE / "verification.json").write_text(json.dumps(found, indent=1))


if __name__ == "__main__":
    main()
