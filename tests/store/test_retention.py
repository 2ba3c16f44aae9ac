"""Purging by age: what goes, what stays, the dry run, and data that come back."""

import threading
from typing import Any

import pytest
from sqlalchemy import func, select

from service.core.plan import Plan
from service.errors import Conflict
from service.store import datasets
from service.store.codec import digest
from service.store.integrity import check_digests
from service.store.records import DatasetRecord
from service.store.tables import batch_items, jobs
from service.workflows import batches, submit
from service.workflows.callers import Caller
from service.workflows.retention import Purged, purge
from service.workflows.run import run_job
from service.workflows.submit import Submission, post_dataset
from tests.jobs import MACHINE, Desk, at, calibration

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


def test_points_that_were_posted_again_stay_until_that_is_old(desk: Desk) -> None:
    """Whoever posts a dataset and then a job on it must not find it purged by the age of another's post."""
    first = finished(desk, 0, seconds=0)
    record, new = post(desk, 0, by="bert", seconds=5 * DAY)
    assert (record.id, record.created_at, new) == (desk.job(first).dataset_id, at(0), True)
    assert purge(desk.database, before=at(4 * DAY), now=at(9 * DAY), dry_run=True).datasets == 0
    assert purge(desk.database, before=at(4 * DAY), now=at(9 * DAY), dry_run=False).datasets == 0
    post(desk, 0, by="bert", seconds=7 * DAY)
    post(desk, 0, by="anna", seconds=6 * DAY)
    assert purge(desk.database, before=at(7 * DAY), now=at(9 * DAY), dry_run=False).datasets == 0
    assert purge(desk.database, before=at(7 * DAY + 1), now=at(9 * DAY), dry_run=False).datasets == 1


def post(desk: Desk, seed: int, *, by: str, seconds: float) -> tuple[DatasetRecord, bool]:
    caller = Caller(name=by, role="submit")
    return post_dataset(desk.database, caller, calibration(seed), most=100, now=at(seconds))


def test_points_purged_between_reading_and_putting_in_refuse_the_job(
    desk: Desk, monkeypatch: pytest.MonkeyPatch
) -> None:
    dataset_id = desk.job(finished(desk, 0, seconds=0)).dataset_id
    whole = submit._checked

    def then_purged(*words: Any) -> Any:
        found = whole(*words)
        assert purge(desk.database, before=at(DAY), now=at(2 * DAY), dry_run=False).datasets == 1
        return found

    monkeypatch.setattr(submit, "_checked", then_purged)
    with pytest.raises(Conflict) as refused:
        desk.submit(Submission(dataset_id=dataset_id), seconds=2 * DAY)
    assert refused.value.code == "dataset_purged"
    assert desk.take(seconds=3 * DAY) is None


def test_points_purged_before_the_jobs_of_a_batch_refuse_it(desk: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    whole = batches._keep_datasets

    def then_purged(*words: Any) -> Any:
        found = whole(*words)
        assert purge(desk.database, before=at(2 * DAY), now=at(2 * DAY), dry_run=False).datasets == 3
        return found

    monkeypatch.setattr(batches, "_keep_datasets", then_purged)
    words = (desk.database, desk.transport, desk.settings, Caller(name="anna", role="submit"))
    posted = [calibration(seed) for seed in range(3)]
    with pytest.raises(Conflict) as refused:
        batches.submit_batch(*words, posted, Plan(), priority=0, repeat_key=None, now=at(DAY))
    assert refused.value.code == "dataset_purged"
    assert desk.take(seconds=3 * DAY) is None
    monkeypatch.undo()
    batches.submit_batch(*words, posted, Plan(), priority=0, repeat_key=None, now=at(DAY))
    assert desk.take(seconds=3 * DAY) is not None


@pytest.mark.parametrize("engine", ["postgresql"], indirect=True)
def test_points_in_the_hands_of_somebody_are_not_purged(desk: Desk) -> None:
    """On PostgreSQL purging and putting in go on at once; on SQLite one waits for the other."""
    used, posted, neither = (desk.job(finished(desk, seed, seconds=0)) for seed in range(3))
    content = calibration(1)
    digest_of = digest(datasets.dataset_document(content))
    with desk.database.write() as using, desk.database.write() as posting:
        found = datasets.find(using, used.dataset_id)
        assert found is not None
        datasets.demand_points(using, [found.digest])
        assert datasets.store(posting, content, digest_of, {}, at(0)) == (posted.dataset_id, False)
        assert purge(desk.database, before=at(DAY), now=at(DAY), dry_run=False).datasets == 1
    with desk.database.read() as connection:
        for kept in (used, posted):
            assert datasets.load(connection, kept.dataset_id) is not None
        with pytest.raises(Conflict):
            datasets.load(connection, neither.dataset_id)


def test_many_batches_of_the_same_datasets_do_not_wait_for_each_other_for_ever(desk: Desk) -> None:
    words = (desk.database, desk.transport, desk.settings, Caller(name="anna", role="submit"))
    made = list[str]()

    def put(order: int) -> None:
        posted = [calibration(seed) for seed in range(30)][:: 1 if order % 2 else -1]
        made.append(batches.submit_batch(*words, posted, Plan(), priority=0, repeat_key=None, now=at(0)))

    threads = [threading.Thread(target=put, args=(order,)) for order in range(6)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len(set(made)) == 6
    with desk.database.read() as connection:
        rows = connection.execute(select(batch_items.c.batch_id, jobs.c.subject).join(jobs)).all()
        assert connection.execute(select(func.count()).select_from(batch_items)).scalar_one() == 180
    assert {subject for _, subject in rows} == {f"gauge-{seed}" for seed in range(30)}


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
