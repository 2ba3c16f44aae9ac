"""Run one job: take it, compute, and record the outcome in one transaction that demands the claim's token.

Each way to end is one function, one transaction and one event, so that a worker which dies between two of them leaves
a job that is whole: still held, until its lease runs out and the sweep lets it wait again.
"""

import json
import time
from collections.abc import Callable
from datetime import datetime, timedelta
from functools import lru_cache
from typing import Any

from service.core.analysis import Progress, analyse
from service.core.observations import Observations, observe
from service.core.plan import Plan
from service.core.result import Result
from service.errors import InvalidInput, LeastbendError, Overloaded
from service.settings import Settings
from service.store import datasets, events, leases, plans, verdicts
from service.store.clock import rfc3339
from service.store.codec import canonical, digest, read_plan, result_document
from service.store.database import Database
from service.store.records import Claim
from service.workflows.provenance import Machine, provenance

LONGEST_PAUSE = timedelta(minutes=5)
RECORD_AGAIN = 0.5  # s

parsed_plan = lru_cache(maxsize=64)(read_plan)  # of a document: jobs of one laboratory share a few


def take_job(
    database: Database, settings: Settings, *, worker: str, now: datetime, stalest: bool = False
) -> Claim | None:
    """Claim the job whose turn it is, if any waits."""
    lease_until = now + timedelta(seconds=settings.lease_seconds)
    with database.write() as connection:
        claim = leases.claim_next(connection, worker=worker, now=now, lease_until=lease_until, stalest=stalest)
        if claim is not None:
            events.add(connection, claim.job_id, "started", now, worker=worker, attempt=claim.attempt)
    return claim


def run_job(
    database: Database,
    claim: Claim,
    machine: Machine,
    *,
    clock: Callable[[], datetime],
    progress: Progress | None = None,
    patience: float = 0.0,
) -> None:
    """Compute and record. What the core refuses fails the job for good. Raises leases.Stale if the claim is void.

    While the database is away, recording is tried again for `patience` seconds, then Overloaded is raised.
    """
    try:
        observations, plan, dataset_digest = _load(database, claim)
        result = analyse(observations, plan, progress=progress)
    except Overloaded:
        raise
    except LeastbendError as error:
        reason = describe(error)
        _patiently(lambda: fail_job(database, claim, error=reason, now=clock()), patience)
        return
    _patiently(
        lambda: record_result(database, claim, result, machine, dataset_digest=dataset_digest, now=clock()), patience
    )


def record_result(
    database: Database, claim: Claim, result: Result, machine: Machine, *, dataset_digest: str, now: datetime
) -> None:
    """Result, provenance, verdict, event and final state, all or none. Raises leases.Stale."""
    document = result_document(result)
    result_digest = digest(document)
    origin = provenance(claim, result, machine, dataset_digest=dataset_digest, result_digest=result_digest, now=now)
    judged = result.verdict

    def statement(previous: str | None) -> dict[str, Any]:
        return {
            "job_id": claim.job_id,
            "subject": claim.subject,
            "verdict": judged.verdict,
            "chosen_degree": result.chosen_degree,
            "reasons": [
                {"code": reason.code, "severity": reason.severity, "message": reason.message}
                for reason in judged.reasons
            ],
            "dataset_digest": dataset_digest,
            "plan_digest": claim.plan_digest,
            "result_digest": result_digest,
            "previous": previous,
            "issued_at": rfc3339(now),
            "service_version": machine.versions["leastbend"],
        }

    with database.write() as connection:
        leases.succeed(
            connection, claim.job_id, claim.token, now=now, verdict=judged.verdict, degree=result.chosen_degree
        )
        verdicts.add_result(
            connection, claim.job_id, document=document, digest_=result_digest, provenance=canonical(origin)
        )
        events.add(
            connection, claim.job_id, "succeeded", now, verdict=judged.verdict, chosen_degree=result.chosen_degree
        )
        verdicts.issue(
            connection, claim.job_id, subject=claim.subject, verdict=judged.verdict, now=now, document=statement
        )


def fail_job(database: Database, claim: Claim, *, error: dict[str, Any], now: datetime) -> None:
    """End with an error; dataset, plan and attempts are kept. Raises leases.Stale."""
    with database.write() as connection:
        leases.fail(connection, claim.job_id, claim.token, now=now, error=json.dumps(error))
        events.add(connection, claim.job_id, "failed", now, code=error["code"], attempt=claim.attempt)


def retry_job(database: Database, settings: Settings, claim: Claim, *, reason: str, now: datetime) -> None:
    """After an error that nobody foresaw: wait and run again, or fail after the last attempt. Raises leases.Stale."""
    if claim.attempt >= settings.max_attempts:
        message = f"failed in {claim.attempt} attempts, the last time with {reason}"
        fail_job(database, claim, error=error_document("internal_error", message), now=now)
        return
    run_after = now + pause(settings, claim.attempt)
    with database.write() as connection:
        leases.give_back(connection, claim.job_id, claim.token, run_after=run_after)
        events.add(connection, claim.job_id, "requeued", now, reason=reason, attempt=claim.attempt)


def hand_back(database: Database, claim: Claim, *, reason: str, now: datetime, wait: timedelta) -> None:
    """For reasons that are not the job's (a stop, a database that is away): the attempt does not count.

    Raises leases.Stale.
    """
    with database.write() as connection:
        leases.give_back(connection, claim.job_id, claim.token, run_after=now + wait, counted=False)
        events.add(connection, claim.job_id, "requeued", now, reason=reason, attempt=claim.attempt)


def pause(settings: Settings, attempt: int) -> timedelta:
    """Wait after a failed attempt: doubles with each, five minutes at most."""
    doublings = min(attempt - 1, 20)
    return min(timedelta(seconds=settings.retry_seconds * 2**doublings), LONGEST_PAUSE)


def describe(error: LeastbendError) -> dict[str, Any]:
    """The error of a failed job as callers read it."""
    fields = error.errors if isinstance(error, InvalidInput) else ()
    return error_document(error.code, error.message, [{"pointer": f.pointer, "message": f.message} for f in fields])


def error_document(code: str, message: str, errors: list[dict[str, str]] | None = None) -> dict[str, Any]:
    """Code, message and, for bad input, the fields."""
    return {"code": code, "message": message, "errors": errors or []}


def _patiently(step: Callable[[], None], seconds: float) -> None:
    deadline = time.monotonic() + seconds
    while True:
        try:
            return step()
        except Overloaded:
            if time.monotonic() >= deadline:
                raise
            time.sleep(RECORD_AGAIN)


def _load(database: Database, claim: Claim) -> tuple[Observations, Plan, str]:
    with database.read() as connection:
        loaded = datasets.load(connection, claim.dataset_id)
        document = plans.load(connection, claim.plan_digest)
    if loaded is None:
        raise LookupError(f"dataset {claim.dataset_id} of job {claim.job_id} is missing")
    content, dataset_digest = loaded
    observed = observe(
        content.x,
        content.y,
        u_x=content.u_x,
        u_y=content.u_y,
        series=content.series,
        level_tolerance=content.level_tolerance,
    )
    return observed, parsed_plan(document), dataset_digest
