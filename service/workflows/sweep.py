"""The sweep, each second in every consumer: jobs whose worker is gone wait again, and lost messages are sent again.

Every step is a conditional UPDATE under the token that was seen, so any number of sweeps may run at once.
"""

import json
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime, timedelta

from sqlalchemy import Connection

from service.settings import Settings
from service.store import events, leases
from service.store.database import Database
from service.store.records import Held
from service.store.transport import Transport
from service.workflows.run import error_document, pause

MOST_MESSAGES = 1000  # of one sweep; the next goes on
NO_JOB = "-"  # a message is a hint: which job to take is the claim's choice


@dataclass(frozen=True, kw_only=True, slots=True)
class Swept:
    """What one sweep did, in jobs; `sent` in messages."""

    requeued: int = 0
    timed_out: int = 0
    given_up: int = 0
    sent: int = 0


def sweep(
    database: Database,
    transport: Transport,
    settings: Settings,
    *,
    now: datetime,
    is_gone: Callable[[str], bool],
    end: Callable[[str], None],
) -> Swept:
    """`is_gone` says of a worker's name whether that process surely runs no more; `end` kills it if it is of this host.

    A worker that lost its lease and still lives hangs or is stopped, perhaps with the database's write lock in hand.
    """
    done = {"requeued": 0, "timed_out": 0, "given_up": 0}
    with database.read() as connection:
        held_now = leases.running(connection)
    silent = [held for held in held_now if held.lease_until < now]
    for held in silent:
        end(held.worker)
    for held in held_now:
        if held not in silent and not is_gone(held.worker):
            continue
        with database.write() as connection:
            try:
                done[_settle(connection, settings, held, now)] += 1
            except leases.Stale:
                continue  # it lives, or another sweep was first
    with database.read() as connection:
        due = leases.due(connection, now)
    return Swept(**done, sent=_send_missing(transport, due))


def _settle(connection: Connection, settings: Settings, held: Held, now: datetime) -> str:
    ran = now - held.started_at
    if ran >= timedelta(seconds=settings.job_seconds):
        message = f"stopped after {settings.job_seconds:g} s, the longest that a job may run"
        _give_up(connection, held, now, "timed_out", message)
        return "timed_out"
    if held.attempts >= settings.max_attempts:
        message = f"its worker was lost in attempt {held.attempts}, the last that it gets"
        _give_up(connection, held, now, "worker_lost", message)
        return "given_up"
    # Losing a worker is seldom the job's fault: the first time it waits for nothing.
    wait = pause(settings, held.attempts) if held.attempts > 1 else timedelta()
    leases.give_back(connection, held.id, held.token, run_after=now + wait)
    events.add(connection, held.id, "requeued", now, reason="its worker was lost", attempt=held.attempts)
    return "requeued"


def _give_up(connection: Connection, held: Held, now: datetime, code: str, message: str) -> None:
    error = json.dumps(error_document(code, message))
    leases.fail(connection, held.id, held.token, now=now, error=error)
    events.add(connection, held.id, "failed", now, code=code, attempt=held.attempts)


def _send_missing(transport: Transport, due: int) -> int:
    """One message for each job that may run and has none. One too many finds nothing to claim and is gone."""
    if due == 0:
        return 0
    on_their_way = transport.size()
    if on_their_way is None:
        return 0
    sent = 0
    for _ in range(min(due - on_their_way, MOST_MESSAGES)):
        if not transport.send(NO_JOB, 0):
            break
        sent += 1
    return sent
