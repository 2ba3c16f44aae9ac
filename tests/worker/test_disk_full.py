"""A full disk: posts are refused and say so, nothing is half-written, and work goes on once there is room again.

With root, a small file system in memory is filled up; without, the size of files is limited by the kernel
(RLIMIT_FSIZE), which SQLite meets in the same place.
"""

import os
import resource
import signal
import subprocess
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path

import psycopg
import pytest
from sqlalchemy import text

from service.errors import Overloaded
from service.settings import Settings
from service.store.database import Database, open_database
from service.store.integrity import check_digests
from service.store.migrate import migrate
from service.store.tables import FINAL, State
from service.store.transport import open_transport
from tests.jobs import Desk
from tests.postgres import PrivatePostgres
from tests.worker.processes import Workers, until

pytestmark = pytest.mark.long
SMALL = 6 * 2**20


def can_mount(directory: Path, size: int) -> bool:
    """Mount a file system in memory there, if this machine lets us."""
    if os.geteuid() != 0:
        return False
    mounted = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", f"size={size},mode=0777", "tmpfs", str(directory)],
        check=False,
        capture_output=True,
    )
    return mounted.returncode == 0


@contextmanager
def small_disk(directory: Path) -> Iterator[tuple[Callable[[], None], Callable[[], None]]]:
    """(fill, free) of a small disk at this directory."""
    directory.mkdir(exist_ok=True)
    if can_mount(directory, SMALL):
        try:
            yield lambda: fill(directory), lambda: (directory / "ballast").unlink()
        finally:
            subprocess.run(["umount", "-l", str(directory)], check=True)
        return
    unlimited = resource.getrlimit(resource.RLIMIT_FSIZE)
    signal.signal(signal.SIGXFSZ, signal.SIG_IGN)

    def limit() -> None:
        largest = max((path.stat().st_size for path in directory.iterdir()), default=0)
        resource.setrlimit(resource.RLIMIT_FSIZE, (largest, unlimited[1]))

    try:
        yield limit, lambda: resource.setrlimit(resource.RLIMIT_FSIZE, unlimited)
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, unlimited)
        signal.signal(signal.SIGXFSZ, signal.SIG_DFL)


def fill(directory: Path) -> None:
    """To the last byte."""
    with (directory / "ballast").open("wb", buffering=0) as ballast:
        for block in (65536, 4096, 1):
            try:
                while True:
                    ballast.write(b"\0" * block)
            except OSError:
                continue


def test_sqlite_on_a_full_disk(tmp_path: Path) -> None:
    data = tmp_path / "data"
    with small_disk(data) as (fill_up, free):
        settings = Settings(data_dir=data, database_url=None, log_level="ERROR")
        database, transport = open_database(settings, durable=True), open_transport(settings)
        try:
            migrate(database)
            desk = Desk(database, transport, settings, datetime.now(UTC))
            kept = [desk.put(seed) for seed in range(3)]
            fill_up()
            refused = post_until_refused(desk, kept)
            assert refused.code == "disk_full"
            assert refused.retry_after > 0
            assert count(database, "jobs") == len(kept)
            with pytest.raises(Overloaded):
                desk.put(999, points=5000)
            assert whole(database)
            with Workers(settings):  # they cannot record, and must not fail or lose the jobs for that
                time.sleep(3)
                assert {desk.job(job_id).state for job_id in kept} <= {State.QUEUED, State.RUNNING, State.SUCCEEDED}
                free()
                kept.append(desk.put(1000))
                until(lambda: all(desk.job(job_id).state in FINAL for job_id in kept), seconds=90)
            assert {desk.job(job_id).state for job_id in kept} == {State.SUCCEEDED}
            assert whole(database)
        finally:
            transport.close()
            database.close()


def test_postgresql_on_a_full_disk(postgres_binaries: Path, tmp_path: Path) -> None:
    server = PrivatePostgres(postgres_binaries)
    place = server.directory / "small"
    place.mkdir()
    if not can_mount(place, 5 * SMALL):
        server.remove()
        pytest.skip("needs root to mount a small file system for a tablespace")
    space = place / "space"
    space.mkdir(mode=0o700)
    os.chown(space, server.directory.stat().st_uid, server.directory.stat().st_gid)
    try:
        server.start()
        with psycopg.connect(server.url().replace("+psycopg", ""), autocommit=True) as admin:
            admin.execute(f"CREATE TABLESPACE small LOCATION '{space}'")
            admin.execute("CREATE DATABASE small TEMPLATE template0 TABLESPACE small")
        settings = Settings(data_dir=tmp_path, database_url=server.url("small"), log_level="ERROR")
        database, transport = open_database(settings, durable=True), open_transport(settings)
        migrate(database)
        desk = Desk(database, transport, settings, datetime.now(UTC))
        kept = [desk.put(seed) for seed in range(3)]
        fill(place)
        refused = post_until_refused(desk, kept)
        assert refused.code == "disk_full"
        assert count(database, "jobs") == len(kept)
        (place / "ballast").unlink()
        kept.append(desk.put(1000))
        with Workers(settings):
            until(lambda: all(desk.job(job_id).state in FINAL for job_id in kept), seconds=90)
        assert {desk.job(job_id).state for job_id in kept} == {State.SUCCEEDED}
        with database.read() as connection:
            assert check_digests(connection).wrong == 0
        transport.close()
        database.close()
    finally:
        server.stop(signal.SIGQUIT)
        subprocess.run(["umount", "-l", str(place)], check=True)
        server.remove()


def post_until_refused(desk: Desk, kept: list[str]) -> Overloaded:
    """What still fits is kept."""
    for seed in range(3, 900):
        try:
            kept.append(desk.put(seed, points=500))
        except Overloaded as error:
            return error
    raise AssertionError("never refused")


def count(database: Database, table: str) -> int:
    with database.read() as connection:
        return int(connection.execute(text(f"SELECT count(*) FROM {table}")).scalar_one())


def whole(database: Database) -> bool:
    """Whether SQLite finds its file sound and every job has what belongs to it."""
    with database.read() as connection:
        sound = connection.execute(text("PRAGMA integrity_check")).scalar_one() == "ok"
        orphans = connection.execute(text("PRAGMA foreign_key_check")).all()
        silent = connection.execute(
            text("SELECT count(*) FROM jobs WHERE id NOT IN (SELECT job_id FROM job_events)")
        ).scalar_one()
        return sound and not orphans and silent == 0 and check_digests(connection).wrong == 0
