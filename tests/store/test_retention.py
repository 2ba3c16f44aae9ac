"""Purging by age: what goes, what stays, the dry run, and data that come back."""

import pytest

from service.errors import Conflict
from service.store import datasets
from service.store.integrity import check_digests
from service.workflows.retention import Purged, purge
from service.workflows.run import run_job
from service.workflows.submit import Submission
from tests.jobs import MACHINE, Desk, at

DAY = 86_400


def finished(desk: Desk, seed: int, *, seconds: float) -> str:
    job_id = desk.put(seed, seconds=seconds)
    run_job(desk.database, desk.took(seconds=seconds), MACHINE, clock=lambda: at(seconds))
    return job_id


@pytest.fixture
def aged(desk: Desk) -> tuple[Desk, str, str, str]:
    """A job of day 0, one of day 10, and one of day 10 on the first one's dataset."""
    return desk, finished(desk, 0, seconds=0), finished(desk, 1, seconds=10 * DAY), finished(desk, 2, seconds=0)


def test_a_dry_run_counts_and_changes_nothing(aged: tuple[Desk, str, str, str]) -> None:
    desk, old, young, _ = aged
    documents = desk.documents(old)
    assert purge(desk.database, before=at(DAY), now=at(11 * DAY), dry_run=True) == Purged(
        jobs=2, datasets=2, dry_run=True
    )
    assert desk.documents(old) == documents
    assert desk.documents(young)


def test_old_results_and_points_go_and_verdicts_stay(aged: tuple[Desk, str, str, str]) -> None:
    desk, old, young, _ = aged
    verdict, row = desk.verdict(old), desk.job(old)
    done = purge(desk.database, before=at(DAY), now=at(11 * DAY), dry_run=False)
    assert done == Purged(jobs=2, datasets=2, dry_run=False)
    assert desk.recorded() == (1, 3)
    assert (desk.verdict(old), desk.job(old)) == (verdict, row)
    assert desk.history(old) == ["purged"]
    assert desk.history(young) == ["queued", "started", "succeeded"]
    with desk.database.read() as connection:
        checked = check_digests(connection)
        with pytest.raises(Conflict, match="removed"):
            datasets.load(connection, row.dataset_id)
        assert datasets.load(connection, desk.job(young).dataset_id) is not None
    assert (checked.wrong, checked.purged) == (0, 2)
    assert purge(desk.database, before=at(DAY), now=at(12 * DAY), dry_run=False).jobs == 0


def test_points_that_a_younger_or_waiting_job_needs_stay(desk: Desk) -> None:
    first = finished(desk, 0, seconds=0)
    desk.put(0, seconds=5 * DAY, by="bert")
    assert purge(desk.database, before=at(DAY), now=at(9 * DAY), dry_run=False) == Purged(
        jobs=1, datasets=0, dry_run=False
    )
    run_job(desk.database, desk.took(seconds=5 * DAY), MACHINE, clock=lambda: at(5 * DAY))
    assert purge(desk.database, before=at(4 * DAY), now=at(9 * DAY), dry_run=False).datasets == 0
    assert purge(desk.database, before=at(6 * DAY), now=at(9 * DAY), dry_run=False).datasets == 1
    assert desk.history(first) == ["purged"]


def test_purged_points_come_back_when_posted_again(desk: Desk) -> None:
    first = finished(desk, 0, seconds=0)
    purge(desk.database, before=at(DAY), now=at(2 * DAY), dry_run=False)
    dataset_id = desk.job(first).dataset_id
    with pytest.raises(Conflict):
        desk.submit(Submission(dataset_id=dataset_id), seconds=3 * DAY)
    again = finished(desk, 0, seconds=3 * DAY)
    assert desk.job(again).dataset_id == dataset_id
    assert purge(desk.database, before=at(DAY), now=at(4 * DAY), dry_run=True).datasets == 0
    with desk.database.read() as connection:
        assert check_digests(connection).right["dataset"] == 1
