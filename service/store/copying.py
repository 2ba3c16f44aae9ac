"""Every table from one database to another, row by row as it is, and a fingerprint that shows both are the same."""

import hashlib
from collections.abc import Iterator
from typing import Any

from sqlalchemy import Connection, Row, Table, func, insert, select, text, update

from service.store.tables import metadata, verdict_chain

ROWS = 500  # a round trip; rows with points of a million readings are 16 MB
FULL = 2**256


def first_filled(connection: Connection) -> str | None:
    """Name of a table that holds anything; None if the database is as a first migration leaves it."""
    for table in metadata.sorted_tables:
        query = select(table).limit(1)
        if table is verdict_chain:
            query = query.where(verdict_chain.c.length > 0)
        if connection.execute(query).first() is not None:
            return table.name
    return None


def copy_tables(source: Connection, target: Connection) -> dict[str, int]:
    """All rows of all tables, parents first; answers how many of each. The target must be empty."""
    copied = {}
    for table in metadata.sorted_tables:
        copied[table.name] = 0
        if table is verdict_chain:  # its one row is there from the start
            (row,) = source.execute(select(table)).mappings()
            copied[table.name] = target.execute(update(table).values(**row)).rowcount
            continue
        for rows in _batches(source, table):
            target.execute(insert(table), [dict(row._mapping) for row in rows])
            copied[table.name] += len(rows)
        _go_on_counting(target, table)
    return copied


def fingerprint(connection: Connection, table: Table) -> str:
    """Same rows, same fingerprint, in whatever order and on whichever engine: the sum of the rows' SHA-256."""
    total = 0
    for rows in _batches(connection, table):
        for row in rows:
            total += int.from_bytes(hashlib.sha256(repr(tuple(row)).encode()).digest(), "big")
    return f"{total % FULL:064x}"


def _batches(connection: Connection, table: Table) -> Iterator[list[Row[Any]]]:
    few = 10 if "x" in table.c or "data" in table.c else ROWS
    found = connection.execute(select(table).execution_options(yield_per=few))
    yield from (list(rows) for rows in found.partitions(few))


def _go_on_counting(target: Connection, table: Table) -> None:
    """On PostgreSQL a copied serial number does not move the sequence behind it."""
    serial = table.autoincrement_column
    if target.dialect.name != "postgresql" or serial is None or serial.default is not None:
        return
    highest = target.execute(select(func.max(serial))).scalar()
    if highest is not None:
        name = target.execute(
            text("SELECT pg_get_serial_sequence(:table, :column)"), {"table": table.name, "column": serial.name}
        ).scalar()
        if name is not None:
            target.execute(text("SELECT setval(:name, :value)"), {"name": name, "value": highest})
