"""Signing in to the pages with a key, and who it is afterwards."""

import secrets
from datetime import datetime, timedelta

from service.errors import Unauthenticated
from service.store import keys, sessions
from service.store.database import Database
from service.workflows.callers import LOCAL, Caller, identify

LASTS = timedelta(hours=12)


def sign_in(database: Database, key: str, *, now: datetime) -> str:
    """A new session's token, which only its cookie holds. Raises Unauthenticated."""
    identify(database, key)
    token = secrets.token_urlsafe(32)
    with database.write() as connection:
        record = keys.find(connection, keys.hash_of(key))
        if record is None or record.revoked_at is not None:
            raise Unauthenticated("this key is not known, or was revoked")
        sessions.add(connection, keys.hash_of(token), key_id=record.id, now=now, expires_at=now + LASTS)
    return token


def visitor(database: Database, token: str | None, *, now: datetime) -> Caller:
    """Who holds the session. Without keys it is whoever sits at the machine. Raises Unauthenticated."""
    with database.read() as connection:
        found = None if token is None else sessions.holder(connection, keys.hash_of(token), now)
        if found is None and keys.are_there(connection):
            raise Unauthenticated("sign in with a key to see this page")
    if found is None:
        return LOCAL
    name, role = found
    return Caller(name=name, role=role)  # type: ignore[arg-type]  # the table's CHECK holds it


def sign_out(database: Database, token: str) -> None:
    """End the session."""
    with database.write() as connection:
        sessions.remove(connection, keys.hash_of(token))
