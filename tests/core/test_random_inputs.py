"""Random inputs of every kind: a documented error or a whole result, never a NaN, and it survives storage."""

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from service.core.analysis import analyse
from service.core.observations import observe
from service.core.plan import BackCalculated, MaxPermissibleError, Plan, Requirements, Resampling
from service.errors import InvalidInput
from service.store.codec import read_result, result_document
from tests.core.data import Floats
from tests.core.walk import all_finite

WEIGHTS = ("auto", "equal", "1/x", "1/x^2", "u_y")
RULES = ("least_bend", "lowest_cv", "one_standard_error", "aicc", "bic")
SCHEMES = ("k_fold", "leave_one_out", "leave_level_out", "leave_series_out")


def draw_x(rng: np.random.Generator, n: int) -> Floats:
    """Even, random, few levels, near-duplicates, far from 0, with 0, negative, of extreme units."""
    kind = rng.integers(8)
    if kind == 0:
        x = np.linspace(0, 10, n)
    elif kind == 1:
        x = rng.uniform(-5, 5, n)
    elif kind == 2:
        x = rng.choice([1.0, 2.0, 5.0, 7.5][: rng.integers(1, 5)], n)
    elif kind == 3:
        x = 1 + rng.integers(0, 3, n) * 1e-15 + rng.integers(0, 4, n)
    elif kind == 4:
        x = 1e8 + rng.uniform(0, 10, n)
    elif kind == 5:
        x = np.geomspace(1e-6, 1e6, n)
    elif kind == 6:
        x = np.round(rng.normal(size=n), 1)
    else:
        x = np.append(np.linspace(0, 1e-3, n - 1), 1e3)
    return x * 10.0 ** rng.choice([0, 0, 0, 0, -50, 50, -20, 12]) if rng.random() < 0.5 else x


def draw_y(rng: np.random.Generator, x: Floats) -> Floats:
    """Polynomials with and without noise, constants, steps, coarse rounding, wild points, extreme units."""
    t = (x - x.min()) / (np.ptp(x) or 1.0)
    y = np.polynomial.polynomial.polyval(t, rng.normal(size=rng.integers(1, 6)))
    kind = rng.integers(7)
    if kind == 0:
        y = y + 10.0 ** rng.uniform(-15, 0) * rng.normal(size=x.size)
    elif kind == 1:
        y = np.full(x.size, rng.choice([0.0, 1.0, -3.7]))
    elif kind == 2:
        y = np.round(y + 0.1 * rng.normal(size=x.size), rng.integers(0, 3))
    elif kind == 3:
        y = rng.standard_cauchy(x.size)
    elif kind == 4:
        y[rng.integers(x.size)] += 1e6
    elif kind == 5:
        y = 1e10 + y
    return y * 10.0 ** rng.choice([-50, 50, -20, 12]) if rng.random() < 0.2 else y


def draw_plan(rng: np.random.Generator, x: Floats) -> Plan:
    """Any combination of options; some cannot run on the data, or at all."""

    def maybe(value: object, share: float = 0.3) -> object:
        return value if rng.random() < share else None

    low = int(rng.integers(0, 4))
    lo, hi = np.sort(rng.uniform(x.min() - 1, x.max() + 1, 2))
    kind = str(rng.choice(["absolute", "percent_of_value", "percent_of_span"]))
    mpe = MaxPermissibleError(value=float(10.0 ** rng.uniform(-3, 2)), of="xy"[rng.integers(2)], kind=kind)  # type: ignore[arg-type]
    return Plan(
        min_degree=low,
        max_degree=min(12, low + int(rng.integers(0, 10))),
        intercept=bool(rng.random() < 0.8),
        weights=str(rng.choice(WEIGHTS)),  # type: ignore[arg-type]
        rule=str(rng.choice(RULES)),  # type: ignore[arg-type]
        resampling=Resampling(
            scheme=str(rng.choice(SCHEMES)),  # type: ignore[arg-type]
            folds=int(rng.integers(2, 12)),
            repeats=int(rng.integers(1, 4)),
            seed=int(rng.integers(100)),
        ),
        working_range=maybe((float(lo), float(hi))),  # type: ignore[arg-type]
        known_uncertainty=bool(rng.random() < 0.15),
        requirements=Requirements(
            max_permissible_error=maybe(mpe),  # type: ignore[arg-type]
            monotonic=bool(rng.random() < 0.7),
            min_levels=maybe(5),  # type: ignore[arg-type]
            min_r2=maybe(0.99),  # type: ignore[arg-type]
            back_calculated=maybe(BackCalculated(limit_percent=15, limit_percent_lowest=20, min_share=0.75)),  # type: ignore[arg-type]
            max_unseen_bend=maybe(0.1),  # type: ignore[arg-type]
        ),
    )


def one(seed: int) -> bool:
    """Whether the drawn input could be analysed; fails on anything but a documented error or a whole result."""
    rng = np.random.default_rng(seed)
    n = int(np.exp(rng.uniform(np.log(3), np.log(60))))
    x = draw_x(rng, n)
    y = draw_y(rng, x)
    u_y = None if rng.random() < 0.6 else np.exp(rng.normal(size=n)) * 10.0 ** rng.uniform(-6, 3)
    u_x = None if u_y is None or rng.random() < 0.7 else np.exp(rng.normal(size=n)) * 10.0 ** rng.uniform(-6, 0)
    series = None if rng.random() < 0.5 else [str(s) for s in rng.integers(0, 3, n)]
    tolerance = None if rng.random() < 0.8 else 0.01
    try:
        observations = observe(x, y, u_x=u_x, u_y=u_y, series=series, level_tolerance=tolerance)
        result = analyse(observations, draw_plan(rng, x))
    except InvalidInput as raised:
        errors = raised.errors
    else:
        all_finite(result)
        document = result_document(result)
        assert result_document(read_result(document)) == document
        return True
    assert errors
    assert all(e.pointer.startswith("/") and e.message for e in errors)
    return False


@settings(max_examples=400, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(st.integers(0, 2**32))
def test_nothing_but_documented_errors(seed: int) -> None:
    one(seed)


@pytest.mark.slow
@pytest.mark.timeout(1800)
def test_ten_thousand_random_inputs() -> None:
    analysed = sum(one(seed) for seed in range(10_000))
    assert analysed > 3000  # most of the rest have too few levels, or a plan that asks what the data lack
