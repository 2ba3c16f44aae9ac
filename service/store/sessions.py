"""Sessions of the pages: who signed in with which key. Only the SHA-256 of a session's cookie is kept."""

from datetime import datetime

from sqlalchemy import Connection, delete, insert, select

from service.store.tables import keys, sessions


def add(connection: Connection, hash_: str, *, key_id: str, now: datetime, expires_at: datetime) -> None:
    """A new session; those that ran out are forgotten on the occasion."""
    connection.execute(delete(sessions).where(sessions.c.expires_at <= now))
    row = {"hash": hash_, "key_id": key_id, "created_at": now, "expires_at": expires_at}
    connection.execute(insert(sessions), row)


def holder(connection: Connection, hash_: str, now: datetime) -> tuple[str, str] | None:
    """Name and role of the key behind a session, while both are in force."""
    query = (
        select(keys.c.name, keys.c.role)
        .join(sessions, sessions.c.key_id == keys.c.id)
        .where(sessions.c.hash == hash_, sessions.c.expires_at > now, keys.c.revoked_at.is_(None))
    )
    row = connection.execute(query).first()
    return None if row is None else (row.name, row.role)


def remove(connection: Connection, hash_: str) -> None:
    """End a session; one that is not there is no error."""
    connection.execute(delete(sessions).where(sessions.c.hash == hash_))
