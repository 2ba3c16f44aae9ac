"""Keeping an installation: migrating, backup, moving to PostgreSQL, removing what is old, checking every digest."""

from datetime import timedelta
from typing import Any

from service.cli.common import migrate_now, opened, settings_of
from service.errors import InvalidInput
from service.store.clock import rfc3339, utc_now
from service.store.integrity import Checked
from service.workflows import retention
from service.workflows.backup import back_up
from service.workflows.move import move_installation
from service.workflows.verify import verify_digests

MOST_DAYS = 36_500  # a century


def migrate(asked: dict[str, Any]) -> int:
    """Bring the database to this version's revision."""
    before, after = migrate_now(settings_of(asked))
    print(f"The database is at revision {after}" + ("." if before == after else f" (was: {before or 'empty'})."))
    return 0


def backup(asked: dict[str, Any]) -> int:
    """Copy the SQLite database to a new file while the service runs."""
    destination = asked.pop("to")
    done = back_up(settings_of(asked), destination)
    print(f"{done.path}: {done.size} bytes. To restore: stop the service and put it in place of the database.")
    return 0


def move(asked: dict[str, Any]) -> int:
    """Carry an embedded installation to an empty PostgreSQL database, all or nothing, and check every digest."""
    url = asked.pop("to")
    settings_of(asked | {"database_url": url})  # says what is wrong with the address
    moved = move_installation(settings_of(asked), url, now=utc_now())
    for table, rows in moved.rows.items():
        print(f"{table:16} {rows:>8} rows")
    _print_checked(moved.checked)
    print("From now on set LEASTBEND_DATABASE_URL. The SQLite file was left as it is.")
    return 0


def purge(asked: dict[str, Any]) -> int:
    """Remove points, results and events of what ended long ago; verdicts are kept. Without --remove: only count."""
    days, remove = asked.pop("older_than"), asked.pop("remove")
    if not 1 <= days <= MOST_DAYS:
        raise InvalidInput.at("/older-than", f"must be from 1 to {MOST_DAYS} days")
    now = utc_now()
    before = now - timedelta(days=days)
    with opened(settings_of(asked)) as database:
        done = retention.purge(database, before=before, now=now, dry_run=not remove)
    would = "would lose" if done.dry_run else "lost"
    print(
        f"Ended before {rfc3339(before)}: {done.jobs} jobs {would} results and events, {done.datasets} datasets their"
    )
    print("points." + (" Nothing was removed: add --remove." if done.dry_run else " Verdicts and digests are kept."))
    return 0


def check(asked: dict[str, Any]) -> int:
    """Compute every digest again, follow the chain of verdicts, and hold each against the rows that it speaks of."""
    with opened(settings_of(asked)) as database:
        checked = verify_digests(database)
    _print_checked(checked)
    for mistake in checked.mistakes:
        print(mistake)
    if checked.wrong > len(checked.mistakes):
        print(f"... and {checked.wrong - len(checked.mistakes)} more")
    return 1 if checked.wrong else 0


def _print_checked(checked: Checked) -> None:
    for kind, number in checked.right.items():
        print(f"{kind:16} {number:>8} digests right")
    if checked.purged:
        print(f"{checked.purged} datasets have lost their points to a purge: their digests cannot be checked.")
    print(f"{checked.wrong} digests wrong, missing or contradicted")
