"""Idempotency-Key: what a post with this key has made, so that sending it again makes nothing new."""

from dataclasses import dataclass
from datetime import datetime, timedelta

from sqlalchemy import Connection, delete, select
from sqlalchemy.dialects.postgresql import insert

from service.store.tables import repeats

KEPT = timedelta(hours=24)


@dataclass(frozen=True, kw_only=True, slots=True)
class Made:
    """What was made, and the fingerprint of the body that asked for it."""

    id: str
    fingerprint: str


def find(connection: Connection, *, submitted_by: str, key: str, now: datetime) -> Made | None:
    """What the key stands for, without taking it."""
    query = select(repeats.c.made_id, repeats.c.fingerprint).where(
        repeats.c.submitted_by == submitted_by, repeats.c.key == key, repeats.c.created_at >= now - KEPT
    )
    row = connection.execute(query).first()
    return None if row is None else Made(id=row.made_id, fingerprint=row.fingerprint)


def claim(
    connection: Connection, *, submitted_by: str, key: str, fingerprint: str, made_id: str, now: datetime
) -> Made | None:
    """None if the key is new: then it stands for `made_id` from now on. Else what it stands for.

    Of two callers at the same moment the second waits here until the first commits, and finds its row.
    """
    connection.execute(delete(repeats).where(repeats.c.created_at < now - KEPT))
    row = {
        "submitted_by": submitted_by,
        "key": key,
        "fingerprint": fingerprint,
        "made_id": made_id,
        "created_at": now,
    }
    taking = insert(repeats).on_conflict_do_nothing(index_elements=["submitted_by", "key"])
    if connection.execute(taking.returning(repeats.c.key), row).scalar() is not None:
        return None
    mine = (repeats.c.submitted_by == submitted_by, repeats.c.key == key)
    found = connection.execute(select(repeats.c.made_id, repeats.c.fingerprint).where(*mine)).one()
    return Made(id=found.made_id, fingerprint=found.fingerprint)
