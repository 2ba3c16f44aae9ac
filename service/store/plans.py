"""Plans: immutable documents named by their digest."""

from datetime import datetime

from sqlalchemy import Connection, bindparam, select
from sqlalchemy.dialects.postgresql import insert

from service.store.tables import plans

FIND = select(plans.c.digest).where(plans.c.digest == bindparam("of_digest"))
LOAD = select(plans.c.document).where(plans.c.digest == bindparam("of_digest"))


def store(connection: Connection, document: bytes, digest: str, now: datetime) -> None:
    """Keep the document under its digest, once."""
    if connection.execute(FIND, {"of_digest": digest}).first() is None:
        statement = insert(plans).on_conflict_do_nothing(index_elements=["digest"])
        connection.execute(statement, {"digest": digest, "document": document.decode(), "created_at": now})


def load(connection: Connection, digest: str) -> str:
    """The document; a job's plan is always there."""
    return str(connection.execute(LOAD, {"of_digest": digest}).scalar_one())
