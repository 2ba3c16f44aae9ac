"""Running one job: its outcome, what is kept of it, and every way to end."""

import hashlib
import json
import threading
from datetime import timedelta
from typing import Any

import numpy as np
import pytest
import rfc8785

from service.core.plan import Plan
from service.core.result import Result
from service.errors import InvalidInput, Overloaded
from service.store import leases, verdicts
from service.store.records import DatasetContent
from service.store.tables import State
from service.workflows import run
from service.workflows.provenance import this_machine
from service.workflows.run import hand_back, pause, retry_job, run_job
from service.workflows.submit import Submission
from tests.jobs import MACHINE, Desk, at, calibration


def finish(desk: Desk, *, seconds: float = 2) -> None:
    run_job(desk.database, desk.took(seconds=1), MACHINE, clock=lambda: at(seconds))


def test_a_job_succeeds_with_result_provenance_verdict_and_event(desk: Desk) -> None:
    job_id = desk.put(3, by="anna")
    run_job(desk.database, desk.took("w1", seconds=1), this_machine(), clock=lambda: at(2))
    job = desk.job(job_id)
    assert job.state == State.SUCCEEDED
    assert (job.started_at, job.finished_at) == (at(1), at(2))
    plan, result, origin = (json.loads(document) for document in desk.documents(job_id))
    verdict = json.loads(desk.verdict(job_id).document)

    assert result["chosen_degree"] == job.chosen_degree == verdict["chosen_degree"]
    assert result["verdict"]["verdict"] == job.verdict == verdict["verdict"]
    assert hashlib.sha256(rfc8785.dumps(result)).hexdigest() == origin["result_digest"] == verdict["result_digest"]
    assert hashlib.sha256(rfc8785.dumps(plan)).hexdigest() == origin["plan_digest"]
    assert origin["folds_digest"] == result["resampling"]["digest"]
    numeric = {"numpy", "scipy", "statsmodels", "scikit-learn", "odrpack"}
    assert set(origin["versions"]) == {"leastbend", "python"} | numeric
    assert {pool["library"] for pool in origin["blas"]} == {"openblas"}
    assert (origin["submitted_by"], origin["worker"], origin["attempt"], origin["seed"]) == ("anna", "w1", 1, 0)
    assert [origin[name] for name in ("queued_at", "started_at", "finished_at")] == [
        f"2030-01-01T00:00:0{second}.000000Z" for second in (0, 1, 2)
    ]
    assert verdict["issued_at"] == origin["finished_at"]
    assert desk.history(job_id) == ["queued", "started", "succeeded"]


def test_the_dataset_digest_is_of_what_was_posted(desk: Desk) -> None:
    content = calibration(4)
    job_id = desk.put(4)
    finish(desk)
    posted = {"subject": content.subject, "x": content.x.tolist(), "y": content.y.tolist()}
    origin = json.loads(desk.documents(job_id)[2])
    assert origin["dataset_digest"] == hashlib.sha256(rfc8785.dumps(posted)).hexdigest()


def test_the_same_dataset_and_plan_give_the_same_result_digest(desk: Desk) -> None:
    first, second = desk.put(5), desk.put(5, by="bert")
    finish(desk)
    finish(desk)
    digests = [json.loads(desk.documents(one)[2])["result_digest"] for one in (first, second)]
    assert digests[0] == digests[1]


def test_verdicts_are_chained_in_order_of_issue(desk: Desk) -> None:
    ids = [desk.put(seed) for seed in range(4)]
    for _ in ids:
        finish(desk)
    previous = None
    for job_id in ids:
        issued = desk.verdict(job_id)
        assert json.loads(issued.document)["previous"] == previous
        assert hashlib.sha256(issued.document.encode()).hexdigest() == issued.digest
        previous = issued.digest


def test_verdicts_issued_at_once_still_form_one_chain(desk: Desk) -> None:
    ids = [desk.put(seed) for seed in range(8)]
    claims = [desk.took(f"w{number}") for number in range(8)]

    def work(number: int) -> None:
        run_job(desk.database, claims[number], MACHINE, clock=lambda: at(2))

    threads = [threading.Thread(target=work, args=(number,)) for number in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    issued = [desk.verdict(job_id) for job_id in ids]
    after = {json.loads(one.document)["previous"]: one.digest for one in issued}
    assert len(after) == 8
    link, seen = None, 0
    while link in after:
        link, seen = after[link], seen + 1
    assert seen == 8


def test_progress_goes_through_the_stages_in_order(desk: Desk) -> None:
    desk.put()
    stages: list[str] = []

    def say(stage: str, done: int, of: int) -> None:
        assert 0 <= done <= of
        stages.append(stage)

    run_job(desk.database, desk.took(), MACHINE, clock=lambda: at(1), progress=say)
    assert list(dict.fromkeys(stages)) == ["fit", "cross_validate", "choose", "check", "judge"]


def test_what_the_core_refuses_fails_for_good_and_says_why(desk: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: Any, **__: Any) -> Result:
        raise InvalidInput.at("/dataset/x", "values lie too close together")

    job_id = desk.put()
    monkeypatch.setattr(run, "analyse", refuse)
    finish(desk)
    job = desk.job(job_id)
    assert (job.state, job.attempts) == (State.FAILED, 1)
    assert json.loads(job.error or "") == {
        "code": "invalid_input",
        "message": "/dataset/x values lie too close together",
        "errors": [{"pointer": "/dataset/x", "message": "values lie too close together"}],
    }
    assert desk.history(job_id) == ["queued", "started", "failed"]
    assert desk.recorded() == (0, 0)


def test_the_unforeseen_is_tried_again_with_growing_pauses_then_fails(desk: Desk) -> None:
    job_id = desk.put()
    clock = 0.0
    for attempt in range(1, desk.settings.max_attempts + 1):
        claim = desk.took(seconds=clock)
        assert claim.attempt == attempt
        retry_job(desk.database, desk.settings, claim, reason="ValueError: odd", now=at(clock))
        wait = desk.settings.retry_seconds * 2 ** (attempt - 1)
        assert desk.take(seconds=clock + 0.9 * wait) is None
        clock += wait
    job = desk.job(job_id)
    assert job.state == State.FAILED
    error = json.loads(job.error or "")
    assert error["code"] == "internal_error"
    assert "ValueError: odd" in error["message"]
    assert desk.history(job_id) == ["queued", *["started", "requeued"] * 4, "started", "failed"]


def test_pauses_double_up_to_five_minutes(desk: Desk) -> None:
    assert pause(desk.settings, 3) == timedelta(seconds=desk.settings.retry_seconds * 4)
    assert pause(desk.settings, 90) == timedelta(minutes=5)


def test_handing_back_does_not_count(desk: Desk) -> None:
    job_id = desk.put()
    hand_back(desk.database, desk.took(), reason="its worker was stopped", now=at(1), wait=timedelta(seconds=3))
    assert desk.take(seconds=3.9) is None
    assert desk.took(seconds=4).attempt == 1
    assert desk.history(job_id) == ["queued", "started", "requeued", "started"]


def test_an_outcome_under_a_void_token_leaves_no_trace(desk: Desk) -> None:
    job_id = desk.put()
    paused = desk.took("w1")
    hand_back(desk.database, paused, reason="test", now=at(1), wait=timedelta())
    run_job(desk.database, desk.took("w2", seconds=1), MACHINE, clock=lambda: at(2))
    before = desk.job(job_id), desk.documents(job_id)
    with pytest.raises(leases.Stale):
        run_job(desk.database, paused, MACHINE, clock=lambda: at(3))
    assert (desk.job(job_id), desk.documents(job_id)) == before
    assert desk.recorded() == (1, 1)
    assert desk.history(job_id) == ["queued", "started", "requeued", "started", "succeeded"]


def test_an_outcome_is_recorded_whole_or_not_at_all(desk: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    """A crash between the steps of the last transaction."""
    job_id = desk.put()
    claim = desk.took()

    class Crash(BaseException):
        pass

    def crash(*_: Any, **__: Any) -> None:
        raise Crash

    with monkeypatch.context() as patch:
        patch.setattr(verdicts, "issue", crash)
        with pytest.raises(Crash):
            run_job(desk.database, claim, MACHINE, clock=lambda: at(2))
    assert desk.job(job_id).state == State.RUNNING
    assert desk.recorded() == (0, 0)
    assert desk.history(job_id) == ["queued", "started"]
    run_job(desk.database, claim, MACHINE, clock=lambda: at(3))
    assert desk.recorded() == (1, 1)


def test_recording_is_tried_again_while_the_database_is_away(desk: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    job_id = desk.put()
    claim = desk.took()
    tried = []
    whole = run.record_result

    def away_twice(*arguments: Any, **options: Any) -> None:
        tried.append(options["now"])
        if len(tried) < 3:
            raise Overloaded("the database is starting", retry_after=5, code="database_away")
        whole(*arguments, **options)

    monkeypatch.setattr(run, "record_result", away_twice)
    monkeypatch.setattr(run, "RECORD_AGAIN", 0.0)
    with pytest.raises(Overloaded):
        run_job(desk.database, claim, MACHINE, clock=lambda: at(2))
    run_job(desk.database, claim, MACHINE, clock=lambda: at(3), patience=30)
    assert tried == [at(2), at(3), at(3)]
    assert desk.job(job_id).state == State.SUCCEEDED


def test_results_are_plain_numbers_even_of_data_without_scatter(desk: Desk) -> None:
    x = np.arange(6.0)
    asked = Submission(plan=Plan(max_degree=3), dataset=DatasetContent(subject="exact", x=x, y=2 * x))
    job_id = desk.submit(asked)
    finish(desk)

    def refuse(word: str) -> None:
        raise AssertionError(word)

    json.loads(desk.documents(job_id)[1], parse_constant=refuse)
