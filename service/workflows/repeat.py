"""A post that is sent again under the same Idempotency-Key makes nothing new."""

from datetime import datetime
from typing import Any

from sqlalchemy import Connection

from service.errors import InvalidInput
from service.store import repeats
from service.store.codec import canonical, digest
from service.store.repeats import Made
from service.workflows.callers import Caller


def made_before(
    connection: Connection, caller: Caller, key: str | None, asked_for: list[Any], *, made_id: str, now: datetime
) -> str | None:
    """The id of what the first post with this key made; None if this is the first (it makes `made_id`), or has no key.

    `asked_for`: what the body asks for, as JSON values. Raises InvalidInput if the first asked for something else.
    """
    if key is None:
        return None
    fingerprint = digest(canonical(asked_for))
    made = repeats.claim(
        connection, submitted_by=caller.name, key=key, fingerprint=fingerprint, made_id=made_id, now=now
    )
    return _same(made, fingerprint)


def known_before(
    connection: Connection, caller: Caller, key: str | None, asked_for: list[Any], *, now: datetime
) -> str | None:
    """The same without taking a new key: for those who answer a repeat before they do what a repeat does not need."""
    if key is None:
        return None
    made = repeats.find(connection, submitted_by=caller.name, key=key, now=now)
    return _same(made, digest(canonical(asked_for)))


def _same(made: Made | None, fingerprint: str) -> str | None:
    if made is not None and made.fingerprint != fingerprint:
        message = "was used within 24 hours for another body; take a new key for a new job"
        raise InvalidInput.at("/header/idempotency-key", message, code="key_reused")
    return None if made is None else made.id
