"""Who calls, and what each role may do.

`submit` puts jobs in and sees what it submitted; `read` sees every dataset, job and verdict; `admin` does everything.
While no key was ever made, whoever reaches the loopback address is the administrator `local`.
"""

import hmac
import secrets
from base64 import b64encode
from dataclasses import dataclass
from datetime import datetime
from typing import Literal

from service.errors import Conflict, Forbidden, NotFound, Unauthenticated
from service.store import keys
from service.store.clock import new_id
from service.store.database import Database

Role = Literal["submit", "read", "admin"]
PREFIX = "lbk_"


@dataclass(frozen=True, kw_only=True, slots=True)
class Caller:
    """Somebody known. `open`: no keys exist, and this is whoever sits at the machine."""

    name: str
    role: Role
    open: bool = False

    @property
    def only_own(self) -> str | None:
        """The submitter whose things alone this caller sees; None: everybody's."""
        return self.name if self.role == "submit" else None

    def must_submit(self) -> None:
        """Raises Forbidden unless this caller may put in datasets, plans and jobs."""
        if self.role == "read":
            raise Forbidden(f"the key {self.name} may read, not submit")

    def must_manage(self) -> None:
        """Raises Forbidden unless this caller is an administrator."""
        if self.role != "admin":
            raise Forbidden(f"the key {self.name} is not an administrator's")


LOCAL = Caller(name="local", role="admin", open=True)


def identify(database: Database, key: str | None) -> Caller:
    """Who holds `key`. Raises Unauthenticated."""
    with database.read() as connection:
        if key is None:
            if keys.are_there(connection):
                raise Unauthenticated("this call needs a key: Authorization: Bearer KEY")
            return LOCAL
        # The index is searched with the SHA-256 of what was sent, never with the key: how long that takes depends on
        # bits that a caller cannot steer towards those of a key, so it tells nothing of one. What is found is compared
        # in constant time all the same, and a revoked key is told from an unknown one neither in words nor in work.
        record = keys.find(connection, keys.hash_of(key))
    if record is None or not hmac.compare_digest(record.hash, keys.hash_of(key)) or record.revoked_at is not None:
        raise Unauthenticated("this key is not known, or was revoked")
    return Caller(name=record.name, role=record.role)  # type: ignore[arg-type]  # the table's CHECK holds it


def create_key(database: Database, *, name: str, role: Role, now: datetime) -> tuple[str, str]:
    """A new key and its notification secret: the key is shown this once. Raises Conflict if the name is taken."""
    key = PREFIX + secrets.token_urlsafe(32)
    secret = "whsec_" + b64encode(secrets.token_bytes(32)).decode()
    record = keys.KeyRecord(
        id=new_id(),
        name=name,
        role=role,
        hash=keys.hash_of(key),
        notify_secret=secret,
        created_at=now,
        revoked_at=None,
    )
    with database.write() as connection:
        if name == LOCAL.name or keys.named(connection, name) is not None:
            raise Conflict(f"the name {name} is taken; a revoked key's name is not used again", code="name_taken")
        keys.add(connection, record)
    return key, secret


def list_keys(database: Database) -> list[keys.KeyRecord]:
    """All keys, oldest first."""
    with database.read() as connection:
        return keys.every(connection)


def revoke_key(database: Database, *, name: str, now: datetime) -> None:
    """From now on nobody gets in with it; what it submitted stays. Raises NotFound."""
    with database.write() as connection:
        if not keys.revoke(connection, name, now):
            raise NotFound(f"there is no key {name} in force")
