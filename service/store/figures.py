"""Figures that were drawn, kept with the version of the code that drew them."""

from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import Connection, select
from sqlalchemy.dialects.postgresql import insert

from service.store.tables import figures


@dataclass(frozen=True, kw_only=True, slots=True)
class FigureRecord:
    """One kept figure: its bytes and their SHA-256."""

    data: bytes
    digest: str


def find(connection: Connection, job_id: str, name: str, kind: str, *, version: int) -> FigureRecord | None:
    """The figure, if it was drawn by this version."""
    query = select(figures.c.data, figures.c.digest).where(
        figures.c.job_id == job_id,
        figures.c.name == name,
        figures.c.format == kind,
        figures.c.version == version,
    )
    row = connection.execute(query).first()
    return None if row is None else FigureRecord(data=row.data, digest=row.digest)


def keep(
    connection: Connection, job_id: str, name: str, kind: str, record: FigureRecord, *, version: int, now: datetime
) -> None:
    """Keep it in place of what an older version drew."""
    drawn = {"version": version, "digest": record.digest, "data": record.data, "made_at": now}
    statement = insert(figures).values(job_id=job_id, name=name, format=kind, **drawn)
    connection.execute(statement.on_conflict_do_update(index_elements=["job_id", "name", "format"], set_=drawn))
