"""Moving an embedded installation to PostgreSQL: everything arrives as it was, or nothing does."""

from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path

import pytest
from sqlalchemy import insert, select, text, update

from service.core.plan import Plan, Resampling
from service.errors import Conflict, Unusable
from service.settings import Settings
from service.store import copying
from service.store.database import Database, open_database
from service.store.integrity import check_digests
from service.store.migrate import migrate
from service.store.tables import State, metadata, results, verdicts
from service.store.transport import open_transport
from service.workflows.move import move_installation
from service.workflows.run import run_job
from tests.jobs import MACHINE, Desk, at


@pytest.fixture
def embedded(tmp_path: Path) -> Iterator[Desk]:
    """An installation with jobs that succeeded, failed and wait, and a dataset with every column."""
    settings = Settings(data_dir=tmp_path / "data", database_url=None)
    database, transport = open_database(settings, durable=True), open_transport(settings)
    migrate(database)
    desk = Desk(database, transport, settings)
    for seed in range(5):
        desk.put(seed, plan=Plan(resampling=Resampling(seed=seed % 2)))
    for _ in range(4):
        run_job(database, desk.took(seconds=1), MACHINE, clock=lambda: at(2))
    yield desk
    transport.close()
    database.close()


def moved_to(url: str) -> Database:
    return open_database(Settings(database_url=url), durable=True)


def test_everything_arrives_and_work_goes_on(embedded: Desk, empty_postgres: str) -> None:
    moved = move_installation(embedded.settings, empty_postgres, now=at(60))
    assert moved.rows["jobs"] == 5
    assert moved.rows["verdicts"] == moved.rows["results"] == 4
    assert moved.checked.right == {"dataset": 5, "plan": 2, "result": 4, "verdict": 4, "chain": 1}
    settings = Settings(database_url=empty_postgres)
    database, transport = moved_to(empty_postgres), open_transport(settings)
    try:
        with database.read() as new, embedded.database.read() as old:
            for table in metadata.sorted_tables:
                assert copying.fingerprint(new, table) == copying.fingerprint(old, table)
        desk = Desk(database, transport, settings)
        waiting = desk.took(seconds=70)
        run_job(database, waiting, MACHINE, clock=lambda: at(71))
        assert desk.history(waiting.job_id) == ["queued", "started", "succeeded"]
        again = desk.put(0, seconds=72)
        run_job(database, desk.took(seconds=73), MACHINE, clock=lambda: at(74))
        assert desk.job(again).state == State.SUCCEEDED
        with database.read() as connection:
            checked = check_digests(connection)
        assert (checked.wrong, checked.right["verdict"]) == (0, 6)
    finally:
        transport.close()
        database.close()


def test_a_damaged_row_stops_the_move_and_leaves_nothing(embedded: Desk, empty_postgres: str) -> None:
    with embedded.database.write() as connection:
        job_id = connection.execute(select(results.c.job_id).limit(1)).scalar_one()
        connection.execute(update(results).where(results.c.job_id == job_id).values(document='{"points":1}'))
    with pytest.raises(Unusable, match=job_id):
        move_installation(embedded.settings, empty_postgres, now=at(60))
    database = moved_to(empty_postgres)
    with database.read() as connection:
        assert copying.first_filled(connection) is None
    database.close()


def test_a_removed_verdict_shows(embedded: Desk) -> None:
    with embedded.database.write() as connection:
        connection.execute(text("DELETE FROM verdicts WHERE sequence = 2"))
    with embedded.database.read() as connection:
        checked = check_digests(connection)
    assert any("verdict 2 is missing before verdict 3" in mistake for mistake in checked.mistakes)
    assert checked.right["verdict"] == 3


def test_an_altered_verdict_shows(embedded: Desk) -> None:
    with embedded.database.write() as connection:
        document = connection.execute(select(verdicts.c.document).where(verdicts.c.sequence == 3)).scalar_one()
        better = document.replace('"chosen_degree":', '"chosen_degree":1')
        connection.execute(update(verdicts).where(verdicts.c.sequence == 3).values(document=better))
    with embedded.database.read() as connection:
        assert check_digests(connection).wrong == 1


def test_a_target_with_data_is_refused(embedded: Desk, empty_postgres: str) -> None:
    move_installation(embedded.settings, empty_postgres, now=at(60))
    with pytest.raises(Conflict, match="not empty"):
        move_installation(embedded.settings, empty_postgres, now=at(61))


def test_running_jobs_are_not_moved(embedded: Desk, empty_postgres: str) -> None:
    embedded.took(seconds=50)
    with pytest.raises(Conflict, match="running"):
        move_installation(embedded.settings, empty_postgres, now=at(51))


def test_without_a_file_there_is_nothing_to_move(tmp_path: Path, empty_postgres: str) -> None:
    with pytest.raises(Unusable, match=r"leastbend\.db"):
        move_installation(Settings(data_dir=tmp_path), empty_postgres, now=datetime.now(UTC))


def test_fingerprints_do_not_depend_on_order_but_on_every_value(database: Database) -> None:
    table = metadata.tables["plans"]
    rows = [{"digest": str(n) * 64, "document": "{}", "created_at": at(n)} for n in range(3)]
    with database.write() as connection:
        connection.execute(insert(table), rows)
        forwards = copying.fingerprint(connection, table)
        connection.execute(table.delete())
        connection.execute(insert(table), rows[::-1])
        assert copying.fingerprint(connection, table) == forwards
        connection.execute(update(table).where(table.c.digest == "0" * 64).values(created_at=at(9)))
        assert copying.fingerprint(connection, table) != forwards
