"""A long history made at once, and how either engine goes about a page of it."""

import json
from datetime import datetime, timedelta
from typing import Any

import uuid_utils
from sqlalchemy import Connection, insert, text

from service.store import jobs as store
from service.store.clock import to_microseconds, utc_now
from service.store.database import Database
from service.store.records import JobFilter
from service.store.tables import State, datasets, jobs, plans

SPAN = timedelta(days=300)
CHUNK = 5000
MONTHS_AGO = (utc_now() - timedelta(days=150)).date().isoformat()
VERDICTS = ("adequate",) * 80 + ("conditional",) * 12 + ("inadequate",) * 8


def crowd(database: Database, count: int, *, analyse: bool = True) -> None:
    """`count` jobs over the last 300 days: 500 subjects, five busy submitters and a rare one, most of them adequate.

    Of each ten thousand the newest few wait or run; failures and `undecided` are few and only among the oldest.
    """
    now = utc_now()
    with database.write() as connection:
        _one_dataset(connection, now)
        for start in range(0, count, CHUNK):
            connection.execute(insert(jobs), [_row(i, count, now) for i in range(start, min(start + CHUNK, count))])
    if analyse:
        with database.write() as connection:
            connection.execute(text("ANALYZE"))


def _row(i: int, count: int, now: datetime) -> dict[str, Any]:
    queued = now - SPAN + SPAN * (i / count)
    old = i < count // 500
    newest = i >= count - count // 1000
    state = State.FAILED if old and i % 2 else State.QUEUED if newest else State.SUCCEEDED
    verdict = None if state is not State.SUCCEEDED else "undecided" if old else VERDICTS[i % len(VERDICTS)]
    return {
        "id": _id_at(queued, i),
        "state": state,
        "dataset_id": "d",
        "plan_digest": "p",
        "subject": f"gauge {i * 7919 % 500}",
        "submitted_by": "rare" if i % 5003 == 0 else f"line {i % 5}",
        "priority": 0,
        "turn": i,
        "queued_at": queued,
        "run_after": queued,
        "attempts": 0 if newest else 1,
        "worker": None if newest else "w1",
        "started_at": None if newest else queued + timedelta(seconds=1),
        "finished_at": None if newest else queued + timedelta(seconds=2),
        "error": json.dumps({"code": "internal_error", "message": "m"}) if state is State.FAILED else None,
        "verdict": verdict,
        "chosen_degree": None if verdict is None else 1 + i % 3,
    }


def _id_at(moment: datetime, number: int) -> str:
    """A UUID version 7 of that time, as a job put in then would have got."""
    milliseconds = to_microseconds(moment) // 1000
    return str(uuid_utils.UUID(int=(milliseconds << 80) | (0x7 << 76) | (0b10 << 62) | number))


def _one_dataset(connection: Connection, now: datetime) -> None:
    connection.execute(
        insert(datasets),
        {
            "id": "d",
            "digest": "0" * 64,
            "subject": "s",
            "created_at": now,
            "points": 3,
            "summary": "{}",
            "details": "{}",
            "x": b"",
            "y": b"",
        },
    )
    connection.execute(insert(plans), {"digest": "p", "document": "{}", "created_at": now})


FILTERS: dict[str, JobFilter] = {
    "nothing": JobFilter(),
    "subject": JobFilter(subject="gauge 17"),
    "state": JobFilter(state=State.FAILED),
    "verdict": JobFilter(verdict="undecided"),
    "submitter": JobFilter(submitted_by="rare"),
    "submitter, succeeded": JobFilter(submitted_by="rare", state=State.SUCCEEDED),
    "since": JobFilter(since=datetime.fromisoformat(MONTHS_AGO + "T00:00:00+00:00")),
    "until": JobFilter(until=datetime.fromisoformat(MONTHS_AGO + "T00:00:00+00:00")),
}


def plans_of(database: Database, *, limit: int = 50) -> dict[str, str]:
    """How the engine goes about each filter: its own words, by filter."""
    explain = "EXPLAIN " if database.postgres else "EXPLAIN QUERY PLAN "
    found = {}
    for name, wanted in FILTERS.items():
        query = store.newest_query(wanted, before=None, limit=limit)
        compiled = query.compile(database.reader, compile_kwargs={"literal_binds": True})
        with database.read() as connection:
            rows = connection.exec_driver_sql(explain + str(compiled)).all()
        found[name] = "\n".join(str(row[-1]) for row in rows)
    return found
