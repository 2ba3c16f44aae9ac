"""Which points are held out together. Membership comes from scikit-learn's splitters alone."""

import hashlib
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt
from sklearn.model_selection import LeaveOneGroupOut, LeaveOneOut, RepeatedKFold

from service.core.observations import Integers, Observations
from service.core.plan import Resampling
from service.core.result import FoldRecord

Assignment = npt.NDArray[np.int32]
MANY = 2000  # points, above which a mask for every fold costs too much, in time or in what a cache would hold
DIGEST_OF = "SHA-256 of the fold number of each point, repeat by repeat, as little-endian 32-bit integers"


@dataclass(frozen=True, kw_only=True, eq=False, slots=True)
class Folds:
    """Fold membership. assignment: (repeats, n), the fold of each point, from 0 in each repeat.

    Folds are counted through all repeats: fold i holds the points order[start[i]:start[i] + size[i]] and
    belongs to repeat repeat_of[i].
    """

    assignment: Assignment
    order: Integers
    start: Integers
    size: Integers
    repeat_of: Integers
    record: FoldRecord

    def points(self, chosen: Integers) -> Integers:
        """The points of some folds, one fold a row; rows shorter than the longest are filled up with n."""
        n = self.assignment.shape[1]
        size = self.size[chosen]
        across = np.arange(int(size.max()))
        at = self.start[chosen][:, None] + across
        short = across >= size[:, None]
        if not short.any():
            return np.asarray(self.order[at])
        at[short] = 0
        return np.asarray(np.where(short, n, self.order[at]), dtype=np.intp)


def make_folds(observations: Observations, resampling: Resampling) -> Folds:
    """Folds under the plan's scheme.

    `k_fold` with as many folds as points, or more, is leave-one-out, once. Sizes of `k_fold` differ by
    one at most: the first n mod k folds of each repeat hold one point more.
    """
    n = observations.n
    if resampling.scheme == "k_fold" and resampling.folds < n:
        return _k_fold(n, resampling.folds, resampling.repeats, resampling.seed)
    if resampling.scheme == "leave_level_out":
        return _leave_group_out(observations.level, "leave_level_out")
    if resampling.scheme == "leave_series_out":
        labels = observations.series or ()
        number = {label: i for i, label in enumerate(dict.fromkeys(labels))}
        return _leave_group_out(np.array([number[label] for label in labels], dtype=np.intp), "leave_series_out")
    return _leave_one_out(n)


def from_assignment(assignment: Assignment, *, scheme: str, seed: int | None, method: str) -> Folds:
    """Folds from a fold number for each point and repeat: shape (repeats, n), numbered from 0."""
    repeats = assignment.shape[0]
    order = np.argsort(assignment, axis=1, kind="stable").ravel()
    counts = [np.bincount(row) for row in assignment]
    size = np.concatenate(counts)
    record = FoldRecord(
        scheme=scheme,
        folds=size.size // repeats,
        repeats=repeats,
        seed=seed,
        method=f"{method}; digest: {DIGEST_OF}",
        digest=hashlib.sha256(np.ascontiguousarray(assignment, dtype="<i4").tobytes()).hexdigest(),
    )
    return Folds(
        assignment=assignment,
        order=order.astype(np.intp),
        start=(np.cumsum(size) - size).astype(np.intp),
        size=size.astype(np.intp),
        repeat_of=np.repeat(np.arange(repeats), [c.size for c in counts]),
        record=record,
    )


@lru_cache(maxsize=256)
def _small_k_fold(n: int, folds: int, repeats: int, seed: int) -> Folds:
    splitter = RepeatedKFold(n_splits=folds, n_repeats=repeats, random_state=seed)
    assignment = np.empty((repeats, n), dtype=np.int32)
    for i, (_, held_out) in enumerate(splitter.split(np.zeros(n))):
        assignment[i // folds, held_out] = i % folds
    method = f"sklearn.model_selection.RepeatedKFold(n_splits={folds}, n_repeats={repeats}, random_state={seed})"
    return from_assignment(assignment, scheme="k_fold", seed=seed, method=method)


def _k_fold(n: int, folds: int, repeats: int, seed: int) -> Folds:
    # membership depends on four numbers only, and a laboratory's datasets share them
    return _small_k_fold(n, folds, repeats, seed) if n <= MANY else _small_k_fold.__wrapped__(n, folds, repeats, seed)


@lru_cache(maxsize=64)
def _leave_one_out(n: int) -> Folds:
    assignment = np.empty((1, n), dtype=np.int32)
    if n <= MANY:
        for i, (_, held_out) in enumerate(LeaveOneOut().split(np.zeros(n))):
            assignment[0, held_out] = i
    else:  # the same folds, without a million index lists
        assignment[0] = np.arange(n)
    return from_assignment(assignment, scheme="leave_one_out", seed=None, method="sklearn.model_selection.LeaveOneOut")


def _leave_group_out(group: Integers, scheme: str) -> Folds:
    assignment = np.empty((1, group.size), dtype=np.int32)
    if group.size <= MANY:
        for i, (_, held_out) in enumerate(LeaveOneGroupOut().split(np.zeros(group.size), groups=group)):
            assignment[0, held_out] = i
    else:  # the same folds: groups in order of their numbers
        assignment[0] = np.unique(group, return_inverse=True)[1]
    return from_assignment(assignment, scheme=scheme, seed=None, method="sklearn.model_selection.LeaveOneGroupOut")
