"""Datasets: their canonical document and digest, storing each content once, and reading them back exactly."""

import json
from collections.abc import Collection
from datetime import datetime
from typing import Any, cast

import numpy as np
from sqlalchemy import Connection, RowMapping, Select, bindparam, func, select, update
from sqlalchemy.dialects.postgresql import insert

from service.core.observations import Floats, Observations
from service.errors import Conflict
from service.store.clock import new_id
from service.store.codec import canonical
from service.store.records import DatasetContent, DatasetRecord, Page
from service.store.tables import dataset_posts, datasets

LITTLE_ENDIAN = "<f8"
HEAD = (
    datasets.c.id,
    datasets.c.digest,
    datasets.c.subject,
    datasets.c.created_at,
    datasets.c.points,
    datasets.c.summary,
    datasets.c.details,
)

# Locked until the commit: on PostgreSQL retention might otherwise take the points meanwhile.
FIND_DIGEST = (
    select(datasets.c.id, func.length(datasets.c.x).label("size"))
    .where(datasets.c.digest == bindparam("of_digest"))
    .with_for_update(key_share=True)
)
ADD = insert(datasets).on_conflict_do_nothing(index_elements=["digest"]).returning(datasets.c.id)
POSTING = insert(dataset_posts)
POSTED = POSTING.on_conflict_do_update(
    index_elements=["submitted_by", "dataset_id"], set_={"posted_at": POSTING.excluded.posted_at}
)
AT_ONCE = 500  # datasets of one statement
LOAD = select(datasets).where(datasets.c.id == bindparam("of_id"))


def dataset_document(content: DatasetContent) -> bytes:
    """Canonical JSON of the dataset as posted: what `dataset_digest` is the SHA-256 of."""
    document: dict[str, Any] = {**content.details, "subject": content.subject}
    for name, column in columns(content).items():
        document[name] = column.tolist()
    if content.series is not None:
        document["series"] = list(content.series)
    return canonical(document)


def columns(content: DatasetContent) -> dict[str, Floats]:
    """The columns of numbers that there are, by name."""
    found = {"x": content.x, "y": content.y, "u_x": content.u_x, "u_y": content.u_y}
    return {name: column for name, column in found.items() if column is not None}


def summarise(content: DatasetContent, observed: Observations) -> dict[str, Any]:
    """What a list of datasets shows of one."""
    return {
        "points": observed.n,
        "levels": observed.levels,
        "x_range": [float(content.x.min()), float(content.x.max())],
        "y_range": [float(content.y.min()), float(content.y.max())],
        "columns": [*columns(content), *(["series"] if content.series is not None else [])],
    }


def store(
    connection: Connection, content: DatasetContent, digest: str, summary: dict[str, Any], now: Any
) -> tuple[str, bool]:
    """Id of the dataset with this digest, and whether it is new."""
    numbers = {name: column.astype(LITTLE_ENDIAN).tobytes() for name, column in columns(content).items()}
    series = None if content.series is None else json.dumps(content.series)
    row = {
        "id": new_id(),
        "digest": digest,
        "subject": content.subject,
        "created_at": now,
        "points": content.x.size,
        "summary": json.dumps(summary),
        "details": json.dumps(content.details),
        "series": series,
        "u_x": None,
        "u_y": None,
        **numbers,
    }
    # The same statement text serves SQLite, and one of two callers at the same moment finds the other's row.
    new = connection.execute(ADD, row).scalar()
    if new is not None:
        return cast(str, new), True
    found = connection.execute(FIND_DIGEST, {"of_digest": digest}).one()
    if found.size == 0:  # retention took its points: here they are again
        again = {"series": series, "created_at": now, **numbers}
        connection.execute(update(datasets).where(datasets.c.id == found.id).values(**again))
    return found.id, False


def posted(connection: Connection, dataset_id: str, submitted_by: str, now: datetime) -> None:
    """Remember that this submitter has posted it, and when the last time was."""
    row = {"dataset_id": dataset_id, "submitted_by": submitted_by, "posted_at": now}
    connection.execute(POSTED, row)


def demand_points(connection: Connection, digests: Collection[str]) -> None:
    """Raises Conflict unless the points of all these datasets are there, and keeps them there until the commit.

    They are locked in the order of their digests, as every writer of many datasets does: so none waits for another
    that waits for it.
    """
    wanted = sorted(set(digests))
    for start in range(0, len(wanted), AT_ONCE):
        query = (
            select(datasets.c.id, func.length(datasets.c.x).label("size"))
            .where(datasets.c.digest.in_(wanted[start : start + AT_ONCE]))
            .order_by(datasets.c.digest)
            .with_for_update(read=True)
        )
        for row in connection.execute(query):
            if row.size == 0:
                raise _purged(row.id)


def _purged(dataset_id: str) -> Conflict:
    return Conflict(f"the points of dataset {dataset_id} were removed; post the dataset again", code="dataset_purged")


def find(connection: Connection, dataset_id: str, *, posted_by: str | None = None) -> DatasetRecord | None:
    """One dataset without its points; with `posted_by`, only if that submitter has posted it."""
    query = _posted_by(select(*HEAD).where(datasets.c.id == dataset_id), posted_by)
    row = connection.execute(query).mappings().first()
    return None if row is None else _record(row)


def load(connection: Connection, dataset_id: str, *, purged_too: bool = False) -> tuple[DatasetContent, str] | None:
    """The whole content of one dataset, exactly as stored, and its digest; None if there is no such dataset.

    Raises Conflict if its points were removed by retention, unless `purged_too`: then the columns are empty.
    """
    row = connection.execute(LOAD, {"of_id": dataset_id}).mappings().first()
    if row is None:
        return None
    if not row["x"] and not purged_too:
        raise _purged(dataset_id)
    content = DatasetContent(
        subject=row["subject"],
        x=_floats(row["x"]),
        y=_floats(row["y"]),
        u_x=None if row["u_x"] is None else _floats(row["u_x"]),
        u_y=None if row["u_y"] is None else _floats(row["u_y"]),
        series=None if row["series"] is None else tuple(json.loads(row["series"])),
        details=json.loads(row["details"]),
    )
    return content, row["digest"]


def newest(
    connection: Connection, *, subject: str | None, posted_by: str | None, before: str | None, limit: int
) -> Page[DatasetRecord]:
    """Datasets, newest first; with `posted_by`, only what that submitter has posted."""
    query = _posted_by(select(*HEAD), posted_by).order_by(datasets.c.id.desc()).limit(limit + 1)
    if subject is not None:
        query = query.where(datasets.c.subject == subject)
    if before is not None:
        query = query.where(datasets.c.id < before)
    rows = [_record(row) for row in connection.execute(query).mappings()]
    return Page(items=tuple(rows[:limit]), after=rows[limit - 1].id if len(rows) > limit else None)


def _posted_by(query: Select[Any], submitter: str | None) -> Select[Any]:
    if submitter is None:
        return query
    return query.join(dataset_posts, dataset_posts.c.dataset_id == datasets.c.id).where(
        dataset_posts.c.submitted_by == submitter
    )


def _record(row: RowMapping) -> DatasetRecord:
    values = dict(row)
    return DatasetRecord(**(values | {name: json.loads(values[name]) for name in ("summary", "details")}))


def _floats(blob: bytes) -> Floats:
    return np.frombuffer(blob, dtype=LITTLE_ENDIAN).astype(np.float64)
