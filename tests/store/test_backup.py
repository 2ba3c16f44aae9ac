"""Backup of the SQLite file while it is written to."""

import sqlite3
import threading
from contextlib import closing
from pathlib import Path

import pytest

from service.errors import Conflict, Unusable
from service.settings import Settings
from service.store.database import FILE_NAME, open_database
from service.store.integrity import check_digests
from service.store.migrate import migrate
from service.store.transport import open_transport
from service.workflows.backup import back_up
from service.workflows.run import run_job
from tests.jobs import MACHINE, Desk, at


def test_a_backup_taken_while_jobs_come_and_go_is_whole(tmp_path: Path) -> None:
    settings = Settings(data_dir=tmp_path / "data", database_url=None)
    database, transport = open_database(settings, durable=True), open_transport(settings)
    migrate(database)
    desk = Desk(database, transport, settings)
    stopped = threading.Event()
    put: list[str] = []

    def busy() -> None:
        while not stopped.is_set():
            put.append(desk.put(len(put)))
            run_job(database, desk.took(seconds=1), MACHINE, clock=lambda: at(2))

    writer = threading.Thread(target=busy)
    writer.start()
    while len(put) < 5:
        stopped.wait(0.01)
    acknowledged = put[:4]
    made = back_up(settings, tmp_path / "copy.db")
    stopped.set()
    writer.join()
    transport.close()
    database.close()

    assert made.size == made.path.stat().st_size > 0
    assert made.path.stat().st_mode & 0o777 == 0o600
    assert [path.name for path in tmp_path.iterdir() if path.is_file()] == ["copy.db"]
    restored = Settings(data_dir=tmp_path / "restored", database_url=None)
    restored.data_dir.mkdir()
    made.path.rename(restored.data_dir / FILE_NAME)
    database = open_database(restored, durable=True)
    assert migrate(database)[0] == migrate(database)[1]
    with database.read() as connection:
        assert check_digests(connection).wrong == 0
    assert {Desk(database, transport, restored).job(job_id).state for job_id in acknowledged} == {"succeeded"}
    database.close()


@pytest.mark.parametrize("name", ["a#b", "a?mode=memory", "a%41", "a b&c=d", "\u00e4;'\""])
def test_a_directory_of_any_name(tmp_path: Path, name: str) -> None:
    """`#`, `?` and `%` mean something in an address: a copy of another, empty database was called a success."""
    settings = Settings(data_dir=tmp_path / name, database_url=None)
    database, transport = open_database(settings, durable=True), open_transport(settings)
    migrate(database)
    job_id = Desk(database, transport, settings).put()
    transport.close()
    database.close()
    assert [path.name for path in tmp_path.iterdir()] == [name]
    assert {path.name for path in (tmp_path / name).iterdir()} >= {FILE_NAME, "queue.db"}
    made = back_up(settings, tmp_path / name / "copy.db")
    with closing(sqlite3.connect(made.path)) as copy:
        assert copy.execute("SELECT id FROM jobs").fetchall() == [(job_id,)]


def test_a_backup_never_overwrites(tmp_path: Path) -> None:
    settings = Settings(data_dir=tmp_path / "data", database_url=None)
    database = open_database(settings, durable=True)
    migrate(database)
    database.close()
    target = tmp_path / "copy.db"
    target.write_text("mine")
    with pytest.raises(Conflict):
        back_up(settings, target)
    assert target.read_text() == "mine"


def test_a_backup_that_cannot_be_written_leaves_nothing(tmp_path: Path) -> None:
    settings = Settings(data_dir=tmp_path / "data", database_url=None)
    settings.data_dir.mkdir()
    with closing(sqlite3.connect(settings.data_dir / FILE_NAME)) as connection:
        connection.execute("CREATE TABLE t (n)")
    with pytest.raises(Unusable):
        back_up(settings, tmp_path / "nowhere" / "copy.db")
    (settings.data_dir / FILE_NAME).write_bytes(b"not a database" * 1000)
    with pytest.raises(Unusable):
        back_up(settings, tmp_path / "copy.db")
    assert [path.name for path in tmp_path.iterdir()] == ["data"]


def test_nothing_to_back_up(tmp_path: Path) -> None:
    with pytest.raises(Unusable):
        back_up(Settings(data_dir=tmp_path, database_url=None), tmp_path / "copy.db")
    with pytest.raises(Unusable, match="pg_dump"):
        back_up(Settings(data_dir=tmp_path, database_url="postgresql+psycopg://h/d"), tmp_path / "copy.db")
