"""NIST StRD: every certified number of the ten polynomial sets. Source: NIST Statistical Reference Datasets, linear
least squares regression, certified values (work of the US government, public domain).

The certificates are for the decimal data; a program sees the data rounded to doubles. `attainable` is the exact
solution of the rounded data: no program can agree with the certificate further than that, except by luck.
"""

import warnings
from fractions import Fraction
from functools import cache
from typing import Any

import numpy as np
import pytest
import statsmodels.api as sm
from sklearn.linear_model import LinearRegression
from sklearn.preprocessing import PolynomialFeatures

from service.core.analysis import analyse
from service.core.observations import observe
from service.core.plan import Plan
from service.core.result import Result
from tests.reference.data import STRD, columns, values
from tests.reference.rational import RationalFit, digits, fit

WANTED = 13.0


def meta(name: str) -> Any:
    return values(f"nist_strd/{name}.json")


@cache
def result(name: str) -> Result:
    data, m = columns(f"nist_strd/{name}.csv"), meta(name)
    plan = Plan(min_degree=m["degree"], max_degree=m["degree"], intercept=m["intercept"], weights="equal")
    return analyse(observe(data.x, data.y), plan)


@cache
def rounded_solution(name: str) -> RationalFit:
    data, m = columns(f"nist_strd/{name}.csv"), meta(name)
    x, y = [Fraction(v) for v in data.x.tolist()], [Fraction(v) for v in data.y.tolist()]
    return fit(x, y, m["degree"], intercept=m["intercept"])


def found_and_certified(name: str) -> dict[str, tuple[float | None, str, Any]]:
    """By quantity: ours, the certificate, the exact solution of the data as doubles."""
    curve, certified, exact = result(name).curve, meta(name)["certified"], rounded_solution(name)
    first = 0 if meta(name)["intercept"] else 1
    table: dict[str, tuple[float | None, str, Any]] = {}
    for k, text in enumerate(certified["coefficients"]):
        power = first + k
        table[f"b{power}"] = (curve.power.coefficients[power], text, exact.coefficients[k])
        sd = certified["coefficient_sd"][k]
        table[f"sd b{power}"] = (curve.power.standard_errors[power], sd, exact.coefficient_sd[k])
    table["residual sd"] = (curve.residual_sd, certified["residual_sd"], exact.residual_sd)
    table["residual ss"] = (result(name).candidates[-1].rss, certified["anova"]["residual_ss"], exact.rss)
    table["R-squared"] = (curve.r2, certified["r_squared"], exact.r_squared)
    if certified["anova"]["f_statistic"] != "Infinity":
        table["F"] = (curve.f.f, certified["anova"]["f_statistic"], exact.f)
    return table


@pytest.mark.parametrize("name", STRD)
def test_every_certified_number_has_13_digits(name: str) -> None:
    for quantity, (ours, certified, _) in found_and_certified(name).items():
        assert ours is not None, quantity
        assert digits(ours, certified) >= WANTED, quantity


@pytest.mark.parametrize("name", STRD)
def test_numbers_equal_the_exact_solution_of_the_data_as_doubles(name: str) -> None:
    for quantity, (ours, _, exact) in found_and_certified(name).items():
        assert ours is not None, quantity
        assert digits(ours, exact) >= 15 - 0.4, quantity


@pytest.mark.parametrize(("name", "max_degree"), [("norris", 6), ("pontius", 6), ("filip", 10)])
def test_certified_degree_is_chosen_from_the_data(name: str, max_degree: int) -> None:
    """Norris is certified as a straight line, Pontius as a quadratic, Filip as a polynomial of degree 10."""
    data = columns(f"nist_strd/{name}.csv")
    plan = Plan(min_degree=1, max_degree=max_degree, weights="equal")
    assert analyse(observe(data.x, data.y), plan).chosen_degree == meta(name)["degree"]


@pytest.mark.parametrize(("name", "degree"), [("wampler1", 5), ("wampler2", 5), ("wampler3", 5), ("wampler4", 3)])
def test_wampler_polynomials(name: str, degree: int) -> None:
    """1 and 2 are exact polynomials of degree 5; 3 and 4 add a fixed error pattern, which in 4 buries terms 4 and 5."""
    data = columns(f"nist_strd/{name}.csv")
    found = analyse(observe(data.x, data.y), Plan(min_degree=1, max_degree=8, weights="equal"))
    assert found.chosen_degree == degree
    assert ("noise_at_rounding" in {w.code for w in found.warnings}) == (name in ("wampler1", "wampler2"))


def test_table_of_digits() -> None:
    """Prints correct digits of the worst number (pytest -s), with common routes beside ours for information."""
    header = f"{'set':10}{'attainable':>11}{'coefficients':>13}{'their sd':>9}{'res. sd':>8}{'R2':>6}{'F':>6}"
    print(f"\n{header}{'polyfit':>10}{'statsmodels':>12}{'scikit-learn':>13}")
    for name in STRD:
        table = found_and_certified(name)
        ours = {q: digits(a, c) for q, (a, c, _) in table.items() if a is not None}
        coefficients = {q: d for q, d in ours.items() if q.startswith("b")}
        sds = {q: d for q, d in ours.items() if q.startswith("sd")}
        attainable = min(digits(e, c) for q, (_, c, e) in table.items() if q.startswith("b"))
        others = "".join(f"{d:{w}.1f}" for d, w in zip(common_routes(name), (10, 12, 13), strict=True))
        f = f"{ours['F']:6.1f}" if "F" in ours else "     -"
        print(
            f"{name:10}{attainable:11.1f}{min(coefficients.values()):13.1f}{min(sds.values()):9.1f}"
            f"{ours['residual sd']:8.1f}{ours['R-squared']:6.1f}{f}{others}"
        )
        assert min(coefficients.values()) >= WANTED


def common_routes(name: str) -> tuple[float, float, float]:
    """Digits of the worst coefficient from numpy, statsmodels and scikit-learn on plain powers of x."""
    data, m = columns(f"nist_strd/{name}.csv"), meta(name)
    design = np.vander(data.x, m["degree"] + 1, increasing=True)
    if not m["intercept"]:
        design = design[:, 1:]
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # they say that the design is badly conditioned, as it is
        plain = np.polyfit(data.x, data.y, m["degree"])[::-1] if m["intercept"] else np.linalg.lstsq(design, data.y)[0]
        ols = sm.OLS(data.y, design).fit().params
        if m["intercept"]:
            features = PolynomialFeatures(m["degree"], include_bias=False).fit_transform(data.x[:, None])
            model = LinearRegression().fit(features, data.y)
            learned = np.concatenate(([model.intercept_], model.coef_))
        else:
            learned = LinearRegression(fit_intercept=False).fit(design, data.y).coef_
    certified = m["certified"]["coefficients"]
    return tuple(min(digits(float(v), c) for v, c in zip(b, certified, strict=True)) for b in (plain, ols, learned))  # type: ignore[return-value]
