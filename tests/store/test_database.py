"""The transaction scope: all or nothing, writers in line, and failures that pass told as such."""

import threading
from pathlib import Path
from typing import Any

import pytest
from sqlalchemy import insert, select, text
from sqlalchemy.exc import OperationalError

from service.errors import Overloaded, Unusable
from service.settings import Settings
from service.store.database import Database, open_database, postgres_options
from service.store.tables import plans
from service.store.write_lock import Busy, WriteLock
from tests.jobs import at


def plan(number: int) -> dict[str, Any]:
    return {"digest": f"{number:064d}", "document": "{}", "created_at": at(number)}


def kept(database: Database) -> int:
    with database.read() as connection:
        return len(connection.execute(select(plans.c.digest)).all())


def test_an_error_undoes_everything(database: Database) -> None:
    def half() -> None:
        with database.write() as connection:
            connection.execute(insert(plans), plan(1))
            raise RuntimeError

    with pytest.raises(RuntimeError):
        half()
    assert kept(database) == 0


def test_writers_that_read_first_never_fail(database: Database) -> None:
    failures: list[BaseException] = []

    def write(first: int) -> None:
        try:
            for number in range(first, first + 25):
                with database.write() as connection:
                    connection.execute(select(plans)).all()
                    connection.execute(insert(plans), plan(number))
        except BaseException as error:  # noqa: BLE001
            failures.append(error)

    threads = [threading.Thread(target=write, args=(100 * number,)) for number in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert failures == []
    assert kept(database) == 200


@pytest.mark.parametrize(
    ("words", "code"),
    [
        ("database or disk is full", "disk_full"),
        ('could not extend file "base/1": No space left on device', "disk_full"),
        ("disk I/O error", "disk_full"),
        ("database is locked", "database_busy"),
        ("the database system is starting up", "database_away"),
        ("terminating connection due to administrator command", "database_away"),
    ],
)
def test_failures_that_pass_are_told_as_such(database: Database, words: str, code: str) -> None:
    with pytest.raises(Overloaded) as caught, database.write():
        raise OperationalError("INSERT", {}, Exception(words))
    assert caught.value.code == code
    assert caught.value.retry_after > 0


def test_other_failures_are_not_hidden(database: Database) -> None:
    with pytest.raises(Exception, match="nonsense"), database.write() as connection:
        connection.execute(text("SELECT nonsense"))


def test_durability_of_each_side(settings: Settings) -> None:
    for durable in (True, False):
        database = open_database(settings, durable=durable)
        with database.write() as connection:
            if database.postgres:
                assert connection.execute(text("SHOW synchronous_commit")).scalar_one() == ("on" if durable else "off")
                assert connection.execute(text("SHOW idle_in_transaction_session_timeout")).scalar_one() == "15s"
            else:
                assert connection.execute(text("PRAGMA synchronous")).scalar_one() == (2 if durable else 1)
                assert connection.execute(text("PRAGMA journal_mode")).scalar_one() == "wal"
                assert connection.execute(text("PRAGMA foreign_keys")).scalar_one() == 1
        database.close()


def test_options_of_the_url_are_kept() -> None:
    url = "postgresql+psycopg://host/name?options=-csearch_path%3Dcalibration"
    options = postgres_options(url, durable=False)["options"]
    assert options.endswith("-csearch_path=calibration")
    assert "synchronous_commit=off" in options


def test_the_write_lock_excludes_threads_and_processes_and_gives_up(tmp_path: Path) -> None:
    one, other = (WriteLock(tmp_path / "lock", seconds=0.05) for _ in range(2))
    with one.held():
        for waiting in (one, other):
            with pytest.raises(Busy), waiting.held():
                pass
    with other.held(), pytest.raises(Busy), one.held():
        pass
    with one.held():
        pass
    one.close()
    other.close()


def test_the_data_directory_is_its_owners_alone(tmp_path: Path) -> None:
    database = open_database(Settings(data_dir=tmp_path / "data", database_url=None), durable=True)
    assert (tmp_path / "data").stat().st_mode & 0o777 == 0o700
    database.close()


def test_a_data_directory_that_cannot_be_made(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(Unusable, match="data directory"):
        open_database(Settings(data_dir=tmp_path / "file" / "data", database_url=None), durable=True)
    assert [path.name for path in tmp_path.iterdir()] == ["file"]
