"""Keys: who may call. Only the SHA-256 of a key is kept; the key itself is 256 random bits, so no salt is needed."""

import hashlib
from dataclasses import dataclass, fields
from datetime import datetime

from sqlalchemy import Connection, bindparam, exists, insert, select, update

from service.store.tables import keys


@dataclass(frozen=True, kw_only=True, slots=True)
class KeyRecord:
    """One key, without itself."""

    id: str
    name: str
    role: str
    hash: str
    notify_secret: str
    created_at: datetime
    revoked_at: datetime | None


COLUMNS = tuple(keys.c[one.name] for one in fields(KeyRecord))
FIND = select(*COLUMNS).where(keys.c.hash == bindparam("of_hash"))
ANY = select(exists(select(keys.c.id)))


def hash_of(key: str) -> str:
    """What is kept of a key."""
    return hashlib.sha256(key.encode()).hexdigest()


def add(connection: Connection, record: KeyRecord) -> None:
    """Keep a new key. Its name must be new: the caller looks first."""
    connection.execute(insert(keys), {one.name: getattr(record, one.name) for one in fields(KeyRecord)})


def find(connection: Connection, hash_: str) -> KeyRecord | None:
    """The key with this hash, revoked or not."""
    row = connection.execute(FIND, {"of_hash": hash_}).mappings().first()
    return None if row is None else KeyRecord(**row)


def named(connection: Connection, name: str) -> KeyRecord | None:
    """The key of this name, revoked or not."""
    row = connection.execute(select(*COLUMNS).where(keys.c.name == name)).mappings().first()
    return None if row is None else KeyRecord(**row)


def every(connection: Connection) -> list[KeyRecord]:
    """All keys, oldest first."""
    return [KeyRecord(**row) for row in connection.execute(select(*COLUMNS).order_by(keys.c.id)).mappings()]


def are_there(connection: Connection) -> bool:
    """Whether any key was ever made, revoked ones included: then nobody gets in without one."""
    return bool(connection.execute(ANY).scalar_one())


def revoke(connection: Connection, name: str, now: datetime) -> bool:
    """Whether there was such a key in force."""
    revoking = update(keys).where(keys.c.name == name, keys.c.revoked_at.is_(None)).values(revoked_at=now)
    return connection.execute(revoking).rowcount == 1
