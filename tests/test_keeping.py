"""Commands that keep an installation, run as a user runs them."""

import hashlib
import sqlite3
import subprocess
import sys
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import psycopg
import pytest

from service.client import Client, ProblemError
from service.settings import Settings
from service.store.database import FILE_NAME
from tests.web.service import running

DATASET = {"x": [0, 1, 2, 3, 4, 5, 6, 7], "y": [0.02, 0.99, 2.01, 2.98, 4.03, 5.01, 5.97, 7.02]}
LONG_AGO = 400 * 86400 * 10**6  # microseconds


def leastbend(*words: str) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-P", "-m", "service.cli", *words]
    return subprocess.run(command, capture_output=True, text=True, timeout=120, check=False)


@pytest.fixture
def data_dir(tmp_path: Path) -> Path:
    """An installation with three verdicts, the first of them more than a year old."""
    directory = tmp_path / "data"
    with running(Settings(data_dir=directory)) as service:
        for i in range(3):
            service.http.post("/v1/jobs", json={"dataset": DATASET | {"subject": f"PT-{i}"}})
        service.work()
    with closing(sqlite3.connect(directory / FILE_NAME)) as connection:
        oldest = connection.execute("SELECT min(id) FROM jobs").fetchone()[0]
        for column in ("queued_at", "started_at", "finished_at"):
            connection.execute(f"UPDATE jobs SET {column} = {column} - ? WHERE id = ?", (LONG_AGO, oldest))
        connection.execute("UPDATE datasets SET created_at = created_at - ?", (LONG_AGO,))
        connection.execute("UPDATE dataset_posts SET posted_at = posted_at - ?", (LONG_AGO,))
        connection.commit()
    return directory


def test_check_finds_one_changed_character(data_dir: Path) -> None:
    good = leastbend("check", "--data-dir", str(data_dir))
    assert good.returncode == 0, good.stderr
    assert "verdict                 3 digests right" in good.stdout
    assert "0 digests wrong" in good.stdout
    with closing(sqlite3.connect(data_dir / FILE_NAME)) as connection:
        connection.execute(
            "UPDATE verdicts SET document = replace(document, 'adequate', 'Adequate') WHERE sequence = 2"
        )
        connection.commit()
    bad = leastbend("check", "--data-dir", str(data_dir))
    assert bad.returncode == 1
    assert "is not what its digest says" in bad.stdout


def test_check_finds_a_result_altered_together_with_its_digest(data_dir: Path) -> None:
    with closing(sqlite3.connect(data_dir / FILE_NAME)) as connection:
        job_id, document = connection.execute("SELECT job_id, document FROM results ORDER BY job_id LIMIT 1").fetchone()
        altered = document.replace('"chosen_degree":1', '"chosen_degree":5')
        assert altered != document
        digest = hashlib.sha256(altered.encode()).hexdigest()
        connection.execute("UPDATE results SET document = ?, digest = ? WHERE job_id = ?", (altered, digest, job_id))
        connection.execute("UPDATE jobs SET verdict = 'inadequate', chosen_degree = 5 WHERE id = ?", (job_id,))
        connection.execute("UPDATE verdicts SET verdict = 'inadequate' WHERE job_id = ?", (job_id,))
        connection.commit()
    done = leastbend("check", "--data-dir", str(data_dir))
    assert done.returncode == 1
    assert "1 digests wrong" in done.stdout
    assert f"verdict 1 of job {job_id} says verdict 'adequate', its own row 'inadequate'" in done.stdout


def test_backup_is_an_installation_of_its_own(data_dir: Path, tmp_path: Path) -> None:
    place = tmp_path / "copy" / FILE_NAME
    place.parent.mkdir()
    done = leastbend("backup", "--data-dir", str(data_dir), "--to", str(place))
    assert done.returncode == 0, done.stderr
    with running(Settings(data_dir=place.parent)) as copy, Client(copy.address) as client:
        assert len(list(client.history(state="succeeded"))) == 3
    again = leastbend("backup", "--data-dir", str(data_dir), "--to", str(place))
    assert again.returncode == 1
    assert "never overwrites" in again.stderr


def test_purge_counts_first_and_keeps_verdicts(data_dir: Path) -> None:
    options = ("purge", "--data-dir", str(data_dir), "--older-than", "365")
    counted = leastbend(*options)
    assert "1 jobs would lose" in counted.stdout
    assert "Nothing was removed" in counted.stdout
    removed = leastbend(*options, "--remove")
    assert removed.returncode == 0, removed.stderr
    assert "1 jobs lost results" in removed.stdout
    assert "0 jobs" in leastbend(*options).stdout
    with running(Settings(data_dir=data_dir)) as service, Client(service.address) as client:
        jobs = list(client.history())
        assert len(jobs) == 3
        assert client.verdict(jobs[-1]["id"])["verdict"] == "adequate"
        assert client.job(jobs[-1]["id"])["result"] is None
    assert leastbend("check", "--data-dir", str(data_dir)).returncode == 0


def test_move_carries_everything_and_the_service_goes_on(data_dir: Path, empty_postgres: str) -> None:
    done = leastbend("move", "--data-dir", str(data_dir), "--to", empty_postgres)
    assert done.returncode == 0, done.stderr
    assert "0 digests wrong" in done.stdout
    with (
        running(Settings(data_dir=data_dir, database_url=empty_postgres)) as service,
        Client(service.address) as client,
    ):
        assert [job["subject"] for job in client.history()] == ["PT-2", "PT-1", "PT-0"]
        job = client.submit(DATASET | {"subject": "PT-3"})
        service.work()
        last = client.verdict(job["id"])
        assert client.wait(job["id"])["state"] == "succeeded"
        assert last["previous"] is not None
    again = leastbend("move", "--data-dir", str(data_dir), "--to", empty_postgres)
    assert again.returncode == 1
    assert "not empty" in again.stderr


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("move", "--to", "mysql://x"), "LEASTBEND_DATABASE_URL"),
        (("purge", "--older-than", "0"), "must be from 1 to 36500 days"),
        (("purge", "--older-than", "999999"), "must be from 1 to 36500 days"),
        (("keys", "create", "--name", "", "--role", "read"), "1 to 200"),
        (("backup", "--to", "b.db"), "there is no"),
    ],
)
def test_commands_say_what_is_wrong(tmp_path: Path, words: tuple[str, ...], said: str) -> None:
    done = leastbend(*words, "--data-dir", str(tmp_path))
    assert done.returncode == 1
    assert said in done.stderr
    assert "Traceback" not in done.stderr


LOOKS = [("check",), ("purge", "--older-than", "9"), ("keys", "list"), ("keys", "revoke", "--name", "a")]


@pytest.mark.parametrize("words", [*LOOKS, ("backup", "--to", "b.db")])
def test_a_mistyped_directory_is_refused_and_not_made(tmp_path: Path, words: tuple[str, ...]) -> None:
    nowhere = tmp_path / "nowhere"
    done = leastbend(*words, "--data-dir", str(nowhere))
    assert (done.returncode, done.stdout) == (1, "")
    assert done.stderr == f"leastbend: there is no leastbend.db in {nowhere}\n"
    assert not nowhere.exists()


def test_a_file_that_is_no_installation_is_refused(tmp_path: Path) -> None:
    file = tmp_path / FILE_NAME
    for content, said in ((b"", "the database is empty"), (b"not a database" * 1000, "the database cannot be read")):
        file.write_bytes(content)
        done = leastbend("check", "--data-dir", str(tmp_path))
        assert (done.returncode, done.stdout) == (1, "")
        assert done.stderr.startswith(f"leastbend: {said}")
        assert "Traceback" not in done.stderr


@pytest.mark.parametrize("words", LOOKS)
def test_an_empty_postgresql_is_refused_and_left_empty(
    empty_postgres: str, words: tuple[str, ...], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("LEASTBEND_DATABASE_URL", empty_postgres)
    done = leastbend(*words)
    assert (done.returncode, done.stdout) == (1, "")
    assert "the database is empty" in done.stderr
    with psycopg.connect(empty_postgres.replace("+psycopg", "")) as connection:
        assert connection.execute("SELECT count(*) FROM pg_tables WHERE schemaname = 'public'").fetchone() == (0,)


@pytest.fixture
def keyed(tmp_path: Path) -> Iterator[tuple[str, str]]:
    """Address of a service with one key, and that key."""
    made = leastbend("keys", "create", "--data-dir", str(tmp_path), "--name", "bench-1", "--role", "submit")
    key = made.stdout.split("key: ")[1].split()[0]
    with running(Settings(data_dir=tmp_path)) as service:
        yield service.address, key


def test_keys_made_by_the_command_open_the_service(keyed: tuple[str, str], tmp_path: Path) -> None:
    address, key = keyed
    with Client(address, key=key) as client:
        job = client.submit(DATASET | {"subject": "PT-1"})
        assert client.job(job["id"])["submitted_by"] == "bench-1"
    assert "bench-1\tsubmit" in leastbend("keys", "list", "--data-dir", str(tmp_path)).stdout
    assert leastbend("keys", "revoke", "--data-dir", str(tmp_path), "--name", "bench-1").returncode == 0
    unknown = leastbend("keys", "revoke", "--data-dir", str(tmp_path), "--name", "nobody")
    assert unknown.returncode == 1
    assert "no key nobody" in unknown.stderr
    with Client(address, key=key) as client, pytest.raises(ProblemError, match="unauthenticated"):
        client.job(job["id"])
