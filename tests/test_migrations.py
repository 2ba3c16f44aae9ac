"""Migrations on both engines: from every older revision, none from a newer one, once when two start, and complete."""

import threading
from collections.abc import Iterator
from pathlib import Path

import pytest
from alembic import command
from alembic.autogenerate import compare_metadata
from alembic.runtime.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import inspect, text

from service.errors import Unusable
from service.settings import Settings
from service.store import migrate as module
from service.store.database import Database, open_database
from service.store.migrate import current_revision, is_current, migrate
from service.store.tables import metadata

SCRIPTS = ScriptDirectory.from_config(module._config())
REVISIONS = [script.revision for script in reversed(list(SCRIPTS.walk_revisions()))]


@pytest.fixture
def empty(engine: str, tmp_path: Path, request: pytest.FixtureRequest) -> Iterator[Database]:
    """A database without any table."""
    url = request.getfixturevalue("empty_postgres") if engine == "postgresql" else None
    database = open_database(Settings(data_dir=tmp_path, database_url=url), durable=True)
    yield database
    database.close()


def upgrade(database: Database, revision: str) -> None:
    """As an older version of the program would have."""
    config = module._config()
    with database.write() as connection:
        config.attributes["connection"] = connection
        command.upgrade(config, revision)


def queue_of_old(database: Database) -> None:
    """A waiting job as the first revision kept it."""
    with database.write() as connection:
        for statement in (
            "INSERT INTO datasets (id, digest, subject, created_at, points, summary, details, x, y)"
            " VALUES ('d', 'dd', 's', 1, 3, '{}', '{}', 'x', 'y')",
            "INSERT INTO plans (digest, document, created_at) VALUES ('p', '{}', 1)",
            "INSERT INTO jobs (id, state, dataset_id, plan_digest, subject, submitted_by, priority, queued_at,"
            " run_after, dispatched_at, attempts) VALUES ('j', 'queued', 'd', 'p', 's', 'anna', 0, 1, 1, 1, 0)",
        ):
            connection.execute(text(statement))


def test_a_new_database_gets_every_table(empty: Database) -> None:
    assert migrate(empty) == (None, REVISIONS[-1])
    assert is_current(empty)
    with empty.read() as connection:
        assert set(inspect(connection).get_table_names()) >= set(metadata.tables)


def test_migrating_twice_changes_nothing(empty: Database) -> None:
    migrate(empty)
    assert migrate(empty) == (REVISIONS[-1], REVISIONS[-1])


@pytest.mark.parametrize("revision", REVISIONS[:-1])
def test_every_older_revision_migrates_with_its_data(empty: Database, revision: str) -> None:
    upgrade(empty, "0001")
    queue_of_old(empty)
    upgrade(empty, revision)
    assert not is_current(empty)
    assert migrate(empty) == (revision, REVISIONS[-1])
    with empty.read() as connection:
        row = connection.execute(text("SELECT id, state, turn FROM jobs")).one()
    assert tuple(row) == ("j", "queued", 0)


def test_posts_from_before_have_the_time_of_their_dataset(empty: Database) -> None:
    upgrade(empty, "0001")
    queue_of_old(empty)
    upgrade(empty, "0004")
    with empty.write() as connection:
        connection.execute(text("UPDATE datasets SET created_at = 1234567 WHERE id = 'd'"))
        connection.execute(text("INSERT INTO dataset_posts (submitted_by, dataset_id) VALUES ('bert', 'd')"))
    migrate(empty)
    with empty.read() as connection:
        rows = connection.execute(text("SELECT submitted_by, posted_at FROM dataset_posts ORDER BY submitted_by")).all()
    assert [tuple(row) for row in rows] == [("anna", 1234567), ("bert", 1234567)]  # anna's by revision 0003


def test_tables_are_what_the_code_says(empty: Database) -> None:
    migrate(empty)
    with empty.read() as connection:
        context = MigrationContext.configure(connection, opts={"compare_type": True, "compare_server_default": True})
        assert compare_metadata(context, metadata) == []
        found = {
            (table, check["name"])
            for table in metadata.tables
            for check in inspect(connection).get_check_constraints(table)
        }
    named = {
        (
            table.name,
            f"ck_{table.name}_{constraint.name}" if not str(constraint.name).startswith("ck_") else constraint.name,
        )
        for table in metadata.sorted_tables
        for constraint in table.constraints
        if type(constraint).__name__ == "CheckConstraint"
    }
    assert {(table, str(name)) for table, name in named} <= {(table, str(name)) for table, name in found}


def test_indexes_of_what_waits_are_partial(empty: Database) -> None:
    migrate(empty)
    with empty.read() as connection:
        if empty.postgres:
            query = "SELECT indexname, indexdef FROM pg_indexes WHERE tablename = 'jobs'"
        else:
            query = "SELECT name, sql FROM sqlite_master WHERE type = 'index' AND tbl_name = 'jobs'"
        definitions = dict(tuple(row) for row in connection.execute(text(query)))
    for name in ("ix_jobs_next", "ix_jobs_turn", "ix_jobs_submitter_turn"):
        assert "WHERE" in definitions[name]
        assert "queued" in definitions[name]


def test_a_newer_database_is_refused_and_left_alone(empty: Database) -> None:
    migrate(empty)
    with empty.write() as connection:
        connection.execute(text("UPDATE alembic_version SET version_num = '9999'"))
    with pytest.raises(Unusable, match="revision 9999.*newer version") as refusal:
        migrate(empty)
    assert refusal.value.code == "database_too_new"
    with empty.read() as connection:
        assert current_revision(connection) == "9999"


def test_of_two_that_start_at_once_one_migrates(
    empty: Database, engine: str, tmp_path: Path, request: pytest.FixtureRequest
) -> None:
    url = request.getfixturevalue("empty_postgres") if engine == "postgresql" else None
    outcomes: list[tuple[str | None, str]] = []
    gate = threading.Barrier(4)

    def start() -> None:
        database = open_database(Settings(data_dir=tmp_path, database_url=url), durable=True)
        gate.wait()
        outcomes.append(migrate(database))
        database.close()

    threads = [threading.Thread(target=start) for _ in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert sorted(outcomes, key=str) == [*[(REVISIONS[-1], REVISIONS[-1])] * 3, (None, REVISIONS[-1])]
    assert is_current(empty)


def test_a_failed_migration_leaves_the_old_revision(empty: Database, monkeypatch: pytest.MonkeyPatch) -> None:
    """All of it is one transaction, on both engines."""
    upgrade(empty, "0001")
    whole = command.upgrade

    def break_off(*arguments: object) -> None:
        whole(*arguments)  # type: ignore[arg-type]
        raise RuntimeError("power cut")

    monkeypatch.setattr(command, "upgrade", break_off)
    with pytest.raises(RuntimeError):
        migrate(empty)
    monkeypatch.undo()
    with empty.read() as connection:
        assert current_revision(connection) == "0001"
        assert "keys" not in inspect(connection).get_table_names()
    assert migrate(empty) == ("0001", REVISIONS[-1])
