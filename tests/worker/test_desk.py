"""The desk: whatever happens in a job, it comes to a documented end, and the desk goes on."""

import json
from collections.abc import Callable
from typing import Any

import pytest

from service.errors import Overloaded
from service.store.tables import State
from service.worker import desk as module
from service.worker.heartbeat import Heartbeat
from service.workflows import run
from tests.jobs import MACHINE, Desk, at


@pytest.fixture
def worker(desk: Desk) -> module.Desk:
    """A worker's desk in this process, at second 1."""
    heartbeat = Heartbeat(desk.settings, desk.database)
    return module.Desk(desk.settings, desk.database, heartbeat, MACHINE, worker="w1", clock=lambda: at(1))


def raising(error: BaseException) -> Callable[..., Any]:
    def step(*_: Any, **__: Any) -> Any:
        raise error

    return step


def test_an_empty_queue(worker: module.Desk) -> None:
    assert not worker.work_once()
    assert not worker.busy


def test_a_job_from_claim_to_outcome(desk: Desk, worker: module.Desk) -> None:
    job_id = desk.put()
    assert worker.work_once()
    assert desk.job(job_id).state == State.SUCCEEDED


def test_the_unforeseen_is_tried_again(desk: Desk, worker: module.Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    job_id = desk.put()
    monkeypatch.setattr(run, "analyse", raising(ZeroDivisionError("of all things")))
    assert worker.work_once()
    assert (desk.job(job_id).state, desk.job(job_id).attempts) == (State.QUEUED, 1)
    assert desk.history(job_id) == ["queued", "started", "requeued"]


def test_after_the_last_attempt_the_reason_is_kept(
    desk: Desk, worker: module.Desk, monkeypatch: pytest.MonkeyPatch
) -> None:
    job_id = desk.put()
    monkeypatch.setattr(run, "analyse", raising(ZeroDivisionError("of all things")))
    later = module.Desk(
        desk.settings.model_copy(update={"max_attempts": 1}),
        desk.database,
        Heartbeat(desk.settings, desk.database),
        MACHINE,
        worker="w1",
        clock=lambda: at(2),
    )
    assert later.work_once()
    error = json.loads(desk.job(job_id).error or "")
    assert error["code"] == "internal_error"
    assert "ZeroDivisionError: of all things" in error["message"]
    assert not worker.work_once()


def test_not_a_number_never_becomes_a_result(desk: Desk, worker: module.Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    job_id = desk.put()
    monkeypatch.setattr(run, "result_document", raising(ValueError("Out of range float values")))
    assert worker.work_once()
    assert desk.job(job_id).state == State.QUEUED
    assert desk.recorded() == (0, 0)


def test_a_database_away_while_reading_costs_no_attempt(
    desk: Desk, worker: module.Desk, monkeypatch: pytest.MonkeyPatch
) -> None:
    job_id = desk.put()
    monkeypatch.setattr(run, "_load", raising(Overloaded("away", retry_after=5, code="database_away")))
    assert worker.work_once()
    assert (desk.job(job_id).state, desk.job(job_id).attempts) == (State.QUEUED, 0)
    assert desk.take(seconds=5) is None
    assert desk.took(seconds=6).attempt == 1


def test_a_stop_in_the_middle_hands_the_job_back(
    desk: Desk, worker: module.Desk, monkeypatch: pytest.MonkeyPatch
) -> None:
    job_id = desk.put()
    monkeypatch.setattr(run, "analyse", raising(KeyboardInterrupt()))
    with pytest.raises(KeyboardInterrupt):
        worker.work_once()
    assert (desk.job(job_id).state, desk.job(job_id).attempts) == (State.QUEUED, 0)
    assert not worker.busy


def test_a_database_away_at_the_claim_is_no_error(
    desk: Desk, worker: module.Desk, monkeypatch: pytest.MonkeyPatch
) -> None:
    job_id = desk.put()
    monkeypatch.setattr(module, "take_job", raising(Overloaded("away", retry_after=5)))
    assert not worker.work_once()
    assert desk.job(job_id).state == State.QUEUED


def test_every_eighth_claim_goes_by_turn_alone(
    desk: Desk, worker: module.Desk, monkeypatch: pytest.MonkeyPatch
) -> None:
    asked: list[bool] = []

    def take(*_: Any, stalest: bool, **__: Any) -> None:
        asked.append(stalest)

    monkeypatch.setattr(module, "take_job", take)
    for _ in range(16):
        worker.work_once()
    assert [number for number, stalest in enumerate(asked, start=1) if stalest] == [8, 16]
    assert desk.settings.max_attempts > 1
