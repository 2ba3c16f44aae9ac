"""The real consumer with real worker processes, on both engines: run, stop, cancel, time out, pause, restart."""

import json
import os
import signal
from datetime import UTC, datetime
from typing import Any

import pytest

from service.settings import Settings
from service.store.database import Database
from service.store.tables import FINAL, State
from service.store.transport import Transport
from service.worker.supervise import Companion
from service.workflows.cancel import cancel_job
from tests.jobs import Desk
from tests.worker.processes import FIFTY_MILLISECONDS, SECONDS, Workers, alive, freeze, send, until

pytestmark = pytest.mark.long
LONG_JOB: dict[str, Any] = {"plan": SECONDS, "points": 2500}


def quick(settings: Settings, **changes: Any) -> Settings:
    """With short times, as the test needs them."""
    return settings.model_copy(update={"lease_seconds": 2.0, "workers": 2, **changes})


@pytest.fixture
def brisk(database: Database, transport: Transport, settings: Settings) -> Desk:
    """A desk of today, whose settings have a short lease."""
    return Desk(database, transport, quick(settings), datetime.now(UTC))


def running(desk: Desk, job_id: str) -> bool:
    return desk.job(job_id).state == State.RUNNING


def ended(desk: Desk, *ids: str) -> bool:
    return all(desk.job(job_id).state in FINAL for job_id in ids)


def test_jobs_run_and_a_graceful_stop_finishes_what_runs(brisk: Desk) -> None:
    with Workers(brisk.settings) as workers:
        ids = [brisk.put(seed) for seed in range(20)]
        until(lambda: ended(brisk, *ids))
        last = [brisk.put(seed, points=30, plan=FIFTY_MILLISECONDS) for seed in range(100, 140)]
        until(lambda: any(running(brisk, job_id) for job_id in last))
        assert workers.stop() == 0
    assert {brisk.job(job_id).state for job_id in ids} == {State.SUCCEEDED}
    states = [brisk.job(job_id).state for job_id in last]
    assert State.RUNNING not in states
    assert State.QUEUED in states  # it did not go on to empty the queue
    assert all("requeued" not in brisk.history(job_id) for job_id in last)


def test_a_terminals_signal_and_the_companions_after_it_are_one_graceful_stop(brisk: Desk) -> None:
    job_id = brisk.put(**LONG_JOB)
    with Workers(quick(brisk.settings, stop_seconds=150)) as workers:
        until(lambda: running(brisk, job_id))
        os.killpg(workers.pid, signal.SIGINT)
        until(lambda: brisk.job(job_id).stage is not None)
        assert workers.stop() == 0
    assert brisk.job(job_id).state == State.SUCCEEDED
    assert brisk.history(job_id) == ["queued", "started", "succeeded"]


def test_a_job_too_long_for_a_graceful_stop_is_handed_back_uncounted(brisk: Desk) -> None:
    settings = quick(brisk.settings, stop_seconds=0.5)
    job_id = brisk.put(**LONG_JOB)
    with Workers(settings) as workers:
        until(lambda: running(brisk, job_id))
        assert workers.stop(signal.SIGINT) == 0
    job = brisk.job(job_id)
    assert (job.state, job.attempts) == (State.QUEUED, 0)
    assert brisk.history(job_id) == ["queued", "started", "requeued"]


def test_cancelling_a_running_job_stops_its_computation(brisk: Desk) -> None:
    job_id, next_id = brisk.put(1, **LONG_JOB), brisk.put(2)
    with Workers(quick(brisk.settings, workers=1)):
        until(lambda: running(brisk, job_id))
        worker = int(str(brisk.job(job_id).worker).split("/")[2])
        cancel_job(brisk.database, job_id, by="anna", now=datetime.now(UTC))
        until(lambda: not alive(worker), seconds=10)
        until(lambda: ended(brisk, next_id))
    assert brisk.history(job_id) == ["queued", "started", "cancelled"]
    assert brisk.job(next_id).state == State.SUCCEEDED


def test_a_job_inside_c_code_is_stopped_when_its_time_is_over(brisk: Desk) -> None:
    job_id = brisk.put()
    with Workers(quick(brisk.settings, job_seconds=1.0), module="tests.worker.hanging"):
        until(lambda: ended(brisk, job_id))
    job = brisk.job(job_id)
    assert json.loads(job.error or "")["code"] == "timed_out"
    assert (job.state, job.attempts) == (State.FAILED, 1)
    assert brisk.history(job_id) == ["queued", "started", "failed"]


def test_progress_of_a_long_job_can_be_read_while_it_runs(brisk: Desk) -> None:
    job_id = brisk.put(**LONG_JOB)
    with Workers(brisk.settings):
        until(lambda: brisk.job(job_id).stage == "cross_validate")
        seen = brisk.job(job_id)
    assert seen.stage_of is not None
    assert seen.stage_done is not None
    assert 0 <= seen.stage_done <= seen.stage_of


def test_a_worker_stopped_beyond_its_lease_records_nothing_twice(brisk: Desk) -> None:
    """SIGSTOP of everything, then a second set of workers; the first wakes up to a void token."""
    job_id = brisk.put(**LONG_JOB)
    with Workers(brisk.settings) as first:
        until(lambda: running(brisk, job_id))
        frozen = [*first.children(), *first.consumer(), first.pid]
        freeze(frozen, brisk.database)
        try:
            # another host's sweep, which can know nothing but that the lease is over
            claim = None
            with Workers(quick(brisk.settings, workers=1)):
                until(lambda: "requeued" in brisk.history(job_id), seconds=30)
                until(lambda: running(brisk, job_id))
                claim = brisk.job(job_id)
                send(signal.SIGCONT, frozen)
                until(lambda: ended(brisk, job_id))
        finally:
            send(signal.SIGCONT, frozen)
    assert claim is not None
    assert brisk.job(job_id).state == State.SUCCEEDED
    assert brisk.recorded() == (1, 1)
    assert brisk.history(job_id) == ["queued", "started", "requeued", "started", "succeeded"]


def test_work_goes_on_without_a_single_message(brisk: Desk) -> None:
    """The sweep sends what was lost."""
    with Workers(brisk.settings) as workers:
        until(lambda: len(workers.children()) == 3)
        ids = [brisk.put(seed) for seed in range(10)]
        brisk.transport.huey.storage.flush_queue()
        until(lambda: ended(brisk, *ids), seconds=30)
    assert {brisk.job(job_id).state for job_id in ids} == {State.SUCCEEDED}


def test_killing_the_keeper_leaves_no_process_behind(brisk: Desk) -> None:
    with Workers(brisk.settings) as workers:
        until(lambda: len(workers.children()) == 3)
        children = [*workers.consumer(), *workers.children()]
        workers.kill()
        until(lambda: not any(alive(pid) for pid in children), seconds=5)


def test_a_killed_consumer_takes_its_workers_along_and_is_replaced(brisk: Desk) -> None:
    with Workers(brisk.settings) as workers:
        until(lambda: len(workers.children()) == 3)
        (consumer,), children = workers.consumer(), workers.children()
        os.kill(consumer, signal.SIGKILL)
        until(lambda: not any(alive(pid) for pid in children), seconds=5)
        until(lambda: len(workers.children()) == 3)
        assert workers.consumer() != [consumer]


def test_a_killed_worker_is_replaced_and_its_job_runs_again(brisk: Desk) -> None:
    job_id = brisk.put(**LONG_JOB)
    with Workers(quick(brisk.settings, lease_seconds=60.0)) as workers:  # so it is not the lease that frees the job
        until(lambda: running(brisk, job_id))
        os.kill(int(str(brisk.job(job_id).worker).split("/")[2]), signal.SIGKILL)
        until(lambda: brisk.history(job_id)[-2:] == ["requeued", "started"], seconds=20)
        until(lambda: len(workers.children()) == 3)


def test_the_companion_restarts_its_child_and_stops_with_its_block(brisk: Desk) -> None:
    with Companion(brisk.settings) as companion:
        until(lambda: companion.pid is not None)
        first = companion.pid
        assert first is not None
        os.kill(first, signal.SIGKILL)
        until(lambda: companion.pid not in (None, first))
        second = companion.pid
        assert second is not None
        job_id = brisk.put()
        until(lambda: ended(brisk, job_id))
    assert companion.pid is None
    assert not alive(second)


def test_without_workers_the_companion_starts_nothing(brisk: Desk) -> None:
    with Companion(quick(brisk.settings, workers=0)) as companion:
        assert companion.pid is None
