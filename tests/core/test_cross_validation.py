"""Cross-validation without refits against explicit refits: scikit-learn's LinearRegression on Chebyshev columns.

scikit-learn drops small singular values (its `tol`), so x is scaled to [-1, 1] first; on powers of raw x it would not
be a reference at all.
"""

import math
from collections.abc import Iterator
from itertools import pairwise

import numpy as np
import pytest
from sklearn.linear_model import LinearRegression
from sklearn.model_selection import LeaveOneGroupOut, LeaveOneOut, RepeatedKFold

from service.core.cross_validation import cross_validate, leave_one_out_errors
from service.core.folds import Folds, make_folds
from service.core.nested import NestedFits, fit_all
from service.core.observations import Observations
from service.core.plan import Plan, Resampling
from service.core.result import Candidate
from tests.core.data import Floats, close, noise, observed, run

TOP = 6
SIZES = (6, 7, 14, 31, 64, 200)
KINDS = ("plain", "replicates", "weights", "both", "no intercept")


def dataset(n: int, kind: str) -> tuple[Floats, Floats, Floats | None]:
    """x, y, u_y: uneven x far from 0, replicates in pairs, uncertainties over a factor of ten."""
    rng = np.random.default_rng(n)
    x = 40 + np.linspace(0, 10, n) + rng.uniform(-3, 3, n) / n
    if kind in ("replicates", "both"):
        x = np.repeat(40 + np.linspace(0, 10, (n + 1) // 2), 2)[:n]
    u = np.exp(rng.uniform(0, np.log(10), n)) / 10 if kind in ("weights", "both") else None
    y = 1 + 2 * (x - 40) - 0.3 * (x - 40) ** 2 + noise(n, n) * (1 if u is None else u)
    order = rng.permutation(n)
    return x[order], y[order], None if u is None else u[order]


def refit_errors(o: Observations, degree: int, train: Floats, out: Floats, *, intercept: bool = True) -> Floats:
    """Held-out errors times sqrt(weight), by a fit of scikit-learn to the rest of the points."""
    lo, hi = o.x.min(), o.x.max()
    columns = np.polynomial.chebyshev.chebvander((2 * o.x - lo - hi) / (hi - lo), degree)
    if not intercept:
        columns = columns[:, :degree] * (o.x / hi)[:, None]
    if columns.shape[1] == 0:
        return o.y[out]
    w = np.ones(o.n) if o.u_y is None else 1 / o.u_y**2
    model = LinearRegression(fit_intercept=False).fit(columns[train], o.y[train], sample_weight=w[train])
    return np.sqrt(w[out]) * (o.y[out] - model.predict(columns[out]))


def check_candidate(o: Observations, ours: Candidate, splits: list[tuple[Floats, Floats]], repeats: int) -> None:
    w = np.ones(o.n) if o.u_y is None else 1 / o.u_y**2
    sse = np.array([np.sum(refit_errors(o, ours.degree, train, out) ** 2) for train, out in splits])
    weight = np.array([w[out].sum() for _, out in splits])
    rmse = np.sqrt(sse / weight)
    mean = np.average(o.y, weights=w)
    r2 = 1 - sse.reshape(repeats, -1).sum(axis=1) / np.sum(w * (o.y - mean) ** 2)
    assert ours.cv.folds_used == ours.cv.folds == len(splits)
    assert close(ours.cv.rmse_mean, rmse.mean())
    assert close(ours.cv.rmse_sd, rmse.std(ddof=1))
    assert close(ours.cv.r2_mean, r2.mean(), absolute=1e-12)
    if repeats > 1:
        assert close(ours.cv.r2_sd, r2.std(ddof=1), 1e-8, absolute=1e-13)
    else:
        assert ours.cv.r2_sd is None


@pytest.mark.parametrize("kind", KINDS[:4])
@pytest.mark.parametrize("n", SIZES)
def test_leave_one_out_equals_refits(n: int, kind: str) -> None:
    x, y, u = dataset(n, kind)
    o = observed(x, y, u_y=u)
    plan = Plan(min_degree=0, max_degree=TOP, weights="equal" if u is None else "u_y")
    w = np.ones(n) if u is None else 1 / u**2
    for ours in run(x, y, plan, u_y=u).candidates:
        if ours.press is None:
            assert not ours.estimable or o.levels - 1 <= ours.degree  # no refit exists
            continue
        errors = np.concatenate([refit_errors(o, ours.degree, train, out) for train, out in LeaveOneOut().split(x)])
        assert close(ours.press, np.sum(errors**2))
        assert close(ours.loo.rmse, math.sqrt(np.sum(errors**2) / w.sum()))
        assert close(
            ours.loo.r2, 1 - np.sum(errors**2) / np.sum(w * (y - np.average(y, weights=w)) ** 2), absolute=1e-12
        )


@pytest.mark.parametrize("kind", KINDS[:4])
@pytest.mark.parametrize("n", SIZES)
def test_ten_times_ten_fold_equals_refits(n: int, kind: str) -> None:
    x, y, u = dataset(n, kind)
    o = observed(x, y, u_y=u)
    plan = Plan(min_degree=0, max_degree=TOP, weights="equal" if u is None else "u_y", resampling=Resampling(seed=7))
    if n > 10:
        splits, repeats = list(RepeatedKFold(n_splits=10, n_repeats=10, random_state=7).split(x)), 10
    else:  # as many folds as points or more: leave-one-out, once
        splits, repeats = list(LeaveOneOut().split(x)), 1
    for ours in run(x, y, plan, u_y=u).candidates:
        if ours.estimable and ours.cv.folds_used == len(splits):
            check_candidate(o, ours, splits, repeats)
        else:
            least = min(np.unique(x[train]).size for train, _ in splits)
            assert ours.degree >= least  # some refit has too few levels
            assert ours.cv.reason


@pytest.mark.parametrize("kind", KINDS[:4])
def test_leave_level_out_equals_refits(kind: str) -> None:
    x, y, u = dataset(30, kind)
    o = observed(x, y, u_y=u)
    plan = Plan(min_degree=0, weights="equal" if u is None else "u_y", resampling=Resampling(scheme="leave_level_out"))
    splits = list(LeaveOneGroupOut().split(x, groups=x))
    assert len(splits) == o.levels
    for ours in run(x, y, plan, u_y=u).candidates:
        check_candidate(o, ours, splits, 1)


@pytest.mark.parametrize("kind", KINDS[:4])
def test_leave_series_out_equals_refits(kind: str) -> None:
    x, y, u = dataset(31, kind)
    series = [("up", "down", "day 2")[i % 3] for i in range(31)]
    o = observed(x, y, u_y=u, series=series)
    plan = Plan(min_degree=0, weights="equal" if u is None else "u_y", resampling=Resampling(scheme="leave_series_out"))
    splits = list(LeaveOneGroupOut().split(x, groups=series))
    for ours in run(x, y, plan, u_y=u, series=series).candidates:
        check_candidate(o, ours, splits, 1)


@pytest.mark.parametrize("intercept", [True, False])
@pytest.mark.parametrize("n", [9, 30, 101])
def test_residual_sums_without_each_fold_equal_refits(n: int, intercept: bool) -> None:
    """`training_rss`, from which the stability of the choice is judged; and held-out errors without intercept."""
    x, y, _ = dataset(n, "replicates")
    o = observed(x, y)
    fits = fit_all(x, y, np.ones(n), top=4, intercept=intercept)
    folds = make_folds(o, Resampling(folds=5, repeats=2))
    held = cross_validate(fits, folds)
    for i, out in enumerate(members(folds)):
        train = np.setdiff1d(np.arange(n), out)
        for degree in range(5):
            if not held.estimable[i, degree]:
                assert np.unique(x[train]).size <= degree
                continue
            inside = refit_errors(o, degree, train, train, intercept=intercept)
            outside = refit_errors(o, degree, train, out, intercept=intercept)
            assert close(held.training_rss[i, degree], float(np.sum(inside**2)), 1e-8, absolute=1e-12)
            assert close(held.sse[i, degree], float(np.sum(outside**2)))


def members(folds: Folds) -> Iterator[Floats]:
    for i in range(folds.size.size):
        yield folds.points(np.array([i]))[0]


@pytest.mark.parametrize(("n", "k", "repeats", "seed"), [(30, 10, 10, 0), (23, 7, 3, 12345), (11, 2, 5, 2**32 - 1)])
def test_folds_are_those_of_scikit_learn(n: int, k: int, repeats: int, seed: int) -> None:
    x = np.arange(n, dtype=np.float64)
    folds = make_folds(observed(x, x), Resampling(folds=k, repeats=repeats, seed=seed))
    splits = RepeatedKFold(n_splits=k, n_repeats=repeats, random_state=seed).split(x)
    ours = list(members(folds))
    assert len(ours) == k * repeats
    for i, (_, out) in enumerate(splits):
        assert sorted(ours[i]) == sorted(out)
        assert folds.repeat_of[i] == i // k


def test_same_seed_same_digest_other_seed_other_digest() -> None:
    x = np.arange(30.0)
    digests = {make_folds(observed(x, x), Resampling(seed=s)).record.digest for s in (0, 0, 1, 2)}
    assert len(digests) == 3


def test_many_points_in_batches_equal_one_batch(monkeypatch: pytest.MonkeyPatch) -> None:
    """The memory bound splits folds into batches; numbers and order do not change, progress is told."""
    x, y, _ = dataset(200, "plain")
    fits = fit_all(x, y, np.ones(200), top=5)
    folds = make_folds(observed(x, y), Resampling(folds=7, repeats=3))
    whole = cross_validate(fits, folds)
    monkeypatch.setattr("service.core.cross_validation.BATCH_NUMBERS", 1000)
    told: list[tuple[int, int]] = []
    parts = cross_validate(fits, folds, lambda done, of: told.append((done, of)))
    np.testing.assert_allclose(parts.sse, whole.sse, rtol=1e-12)
    assert told[-1] == (21, 21)
    assert len(told) > 3
    assert all(a[0] < b[0] for a, b in pairwise(told))


def test_a_fold_that_holds_a_level_that_the_degree_needs() -> None:
    """Three levels: without the middle one a parabola has no fit, a line has; scikit-learn's line is the reference."""
    x = np.repeat([1.0, 2.0, 4.0], 4)
    y = x + 0.1 * noise(12)
    o = observed(x, y)
    found = run(
        x, y, Plan(min_degree=0, max_degree=3, resampling=Resampling(scheme="leave_level_out"), weights="equal")
    )
    by_degree = {c.degree: c for c in found.candidates}
    splits = list(LeaveOneGroupOut().split(x, groups=x))
    check_candidate(o, by_degree[1], splits, 1)
    assert by_degree[2].estimable
    assert by_degree[2].cv.folds_used == 0
    assert by_degree[2].cv.rmse_mean is None
    assert by_degree[2].cv.reason == "3 folds leave too few levels for this degree"
    assert not by_degree[3].estimable
    assert by_degree[3].rss is None


def test_leverage_of_one_has_no_leave_one_out() -> None:
    """A lone end point decides a line through two levels: leaving it out leaves one level."""
    x = np.array([1.0, 1.0, 1.0, 5.0])
    fits: NestedFits = fit_all(x, np.array([1.0, 1.1, 0.9, 4.0]), np.ones(4), top=1)
    errors = leave_one_out_errors(fits)
    assert np.isnan(errors[3, 1])
    assert np.isfinite(errors[:3, 1]).all()
