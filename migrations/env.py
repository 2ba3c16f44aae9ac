"""Runs migrations on the connection given by service.store.migrate, or on the configured database for developers."""

from typing import Any, Literal

from alembic import context
from alembic.autogenerate.api import AutogenContext
from sqlalchemy import Connection

from service.settings import Settings
from service.store.database import open_database
from service.store.tables import Instant, metadata


def render(kind: str, item: Any, _autogenerate: AutogenContext) -> str | Literal[False]:
    """Migrations name plain SQL types, so that they stay true when the code changes."""
    return "sa.BigInteger()" if kind == "type" and isinstance(item, Instant) else False


def run(connection: Connection) -> None:
    """Upgrade on this connection; its owner commits."""
    context.configure(connection=connection, target_metadata=metadata, render_as_batch=True, render_item=render)
    with context.begin_transaction():
        context.run_migrations()


given = context.config.attributes.get("connection")
if given is not None:
    run(given)
else:
    with open_database(Settings(), durable=True).write() as own:
        run(own)
