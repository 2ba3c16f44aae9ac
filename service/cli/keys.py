"""Making, listing and revoking keys."""

from typing import Any

from service.cli.common import opened, settings_of
from service.errors import InvalidInput
from service.store.clock import rfc3339, utc_now
from service.workflows.callers import create_key, list_keys, revoke_key


def create(asked: dict[str, Any]) -> int:
    """Make a key and show it, this once."""
    name, role = asked.pop("name"), asked.pop("role")
    if not 0 < len(name) <= 200 or not name.isprintable():
        raise InvalidInput.at("/name", "must be 1 to 200 printable characters")
    with opened(settings_of(asked), make=True) as database:
        key, secret = create_key(database, name=name, role=role, now=utc_now())
    print(f"key: {key}\nnotification secret: {secret}\nNeither is shown again; only a hash of the key is kept.")
    return 0


def show(asked: dict[str, Any]) -> int:
    """List keys: name, role, when made, when revoked."""
    with opened(settings_of(asked)) as database:
        for one in list_keys(database):
            revoked = "in force" if one.revoked_at is None else f"revoked {rfc3339(one.revoked_at)}"
            print(f"{one.name}\t{one.role}\t{rfc3339(one.created_at)}\t{revoked}")
    return 0


def revoke(asked: dict[str, Any]) -> int:
    """Revoke a key: nobody gets in with it from now on. What it submitted stays."""
    name = asked.pop("name")
    with opened(settings_of(asked)) as database:
        revoke_key(database, name=name, now=utc_now())
    print(f"{name} is revoked.")
    return 0
