"""Batches: many datasets posted at once under one plan, and what has become of each."""

import json
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from sqlalchemy import Connection, RowMapping, func, insert, select

from service.store.records import Page
from service.store.tables import State, batch_items, batches, jobs, results


@dataclass(frozen=True, kw_only=True, slots=True)
class BatchRecord:
    """One batch. `states`: number of its jobs by state; `refused`: datasets that made no job."""

    id: str
    submitted_by: str
    plan_digest: str
    created_at: datetime
    size: int
    refused: int
    states: dict[str, int]


@dataclass(frozen=True, kw_only=True, slots=True)
class BatchItem:
    """One dataset of a batch: the job it made, with the documents of its result, or why it was refused."""

    position: int
    job_id: str | None
    error: dict[str, Any] | None
    state: str | None
    subject: str | None
    verdict: str | None
    chosen_degree: int | None
    job_error: str | None
    result: str | None
    provenance: str | None


def add(
    connection: Connection,
    *,
    batch_id: str,
    submitted_by: str,
    plan_digest: str,
    now: datetime,
    items: Sequence[tuple[str | None, dict[str, Any] | None]],
) -> None:
    """Keep a batch; each item is (job id, None) or (None, error)."""
    row = {
        "id": batch_id,
        "submitted_by": submitted_by,
        "plan_digest": plan_digest,
        "created_at": now,
        "size": len(items),
    }
    connection.execute(insert(batches), row)
    rows = [
        {
            "batch_id": batch_id,
            "position": position,
            "job_id": job_id,
            "error": None if error is None else json.dumps(error),
        }
        for position, (job_id, error) in enumerate(items)
    ]
    connection.execute(insert(batch_items), rows)


def find(connection: Connection, batch_id: str) -> BatchRecord | None:
    """One batch with its progress."""
    row = connection.execute(select(batches).where(batches.c.id == batch_id)).mappings().first()
    return None if row is None else _record(connection, row)


def newest(connection: Connection, *, submitted_by: str | None, before: str | None, limit: int) -> Page[BatchRecord]:
    """Batches, newest first."""
    query = select(batches).order_by(batches.c.id.desc()).limit(limit + 1)
    if submitted_by is not None:
        query = query.where(batches.c.submitted_by == submitted_by)
    if before is not None:
        query = query.where(batches.c.id < before)
    rows = list(connection.execute(query).mappings())
    items = tuple(_record(connection, row) for row in rows[:limit])
    return Page(items=items, after=items[-1].id if len(rows) > limit else None)


def items(connection: Connection, batch_id: str, *, after: int, limit: int) -> list[BatchItem]:
    """Items behind position `after`, in order."""
    i = batch_items.c
    query = (
        select(
            i.position,
            i.job_id,
            i.error,
            jobs.c.state,
            jobs.c.subject,
            jobs.c.verdict,
            jobs.c.chosen_degree,
            jobs.c.error.label("job_error"),
            results.c.document.label("result"),
            results.c.provenance,
        )
        .outerjoin(jobs, jobs.c.id == i.job_id)
        .outerjoin(results, results.c.job_id == i.job_id)
        .where(i.batch_id == batch_id, i.position > after)
        .order_by(i.position)
        .limit(limit)
    )
    return [
        BatchItem(**{**row, "error": None if row["error"] is None else json.loads(row["error"])})
        for row in connection.execute(query).mappings()
    ]


def _record(connection: Connection, row: RowMapping) -> BatchRecord:
    counting = (
        select(jobs.c.state, func.count().label("number"))
        .select_from(batch_items.outerjoin(jobs, jobs.c.id == batch_items.c.job_id))
        .where(batch_items.c.batch_id == row["id"])
        .group_by(jobs.c.state)
    )
    counts: dict[str | None, int] = {row.state: row.number for row in connection.execute(counting)}
    refused = counts.pop(None, 0)
    return BatchRecord(**row, refused=refused, states={state.value: counts.get(state.value, 0) for state in State})
