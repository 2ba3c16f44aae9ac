"""Moving up: all of an embedded installation to PostgreSQL, all or nothing, with every digest checked at the end."""

from dataclasses import dataclass
from datetime import datetime

from sqlalchemy import text

from service.errors import Conflict, Unusable
from service.settings import Settings
from service.store import copying, leases
from service.store.database import FILE_NAME, Database, open_database
from service.store.integrity import Checked, check_digests
from service.store.migrate import migrate
from service.store.tables import metadata


@dataclass(frozen=True, kw_only=True, slots=True)
class Moved:
    """Rows by table, and the digests that were computed again on PostgreSQL."""

    rows: dict[str, int]
    checked: Checked


def move_installation(settings: Settings, database_url: str, *, now: datetime) -> Moved:
    """From the SQLite file in `settings.data_dir` to an empty PostgreSQL database; the file stays as it is.

    Raises Conflict where a job is running or the target holds data, Unusable where there is no file, where a revision
    is newer than this program, or where anything came out different (then nothing is kept on PostgreSQL).
    """
    if not (settings.data_dir / FILE_NAME).is_file():
        raise Unusable(f"there is no {FILE_NAME} in {settings.data_dir.absolute()}")
    embedded = Settings.model_validate(settings.model_dump() | {"database_url": None})
    source = open_database(embedded, durable=True)
    target = open_database(
        Settings.model_validate(settings.model_dump() | {"database_url": database_url}), durable=True
    )
    try:
        migrate(source)
        migrate(target)
        return move(source, target, now=now)
    finally:
        source.close()
        target.close()


def move(source: Database, target: Database, *, now: datetime) -> Moved:
    """Both at the newest revision. The source takes no writes meanwhile."""
    with source.write() as old, target.write() as new:
        new.execute(text("SET LOCAL idle_in_transaction_session_timeout = 0"))  # reading the source may take long
        new.execute(text("LOCK TABLE verdict_chain IN EXCLUSIVE MODE"))  # nobody else moves or works here meanwhile
        alive = [held.id for held in leases.running(old) if held.lease_until >= now]
        if alive:
            raise Conflict(f"{len(alive)} jobs are running: stop the service, then move", code="jobs_are_running")
        filled = copying.first_filled(new)
        if filled is not None:
            raise Conflict(f"the target is not empty: its table {filled} holds rows", code="target_not_empty")
        rows = copying.copy_tables(old, new)
        for table in metadata.sorted_tables:
            if copying.fingerprint(old, table) != copying.fingerprint(new, table):
                raise Unusable(f"table {table.name} did not arrive as it was; nothing was kept on PostgreSQL")
        checked = check_digests(new)
        if checked.wrong:
            first = "; ".join(checked.mistakes)
            raise Unusable(f"{checked.wrong} digests do not fit ({first}); nothing was kept on PostgreSQL")
    return Moved(rows=rows, checked=checked)
