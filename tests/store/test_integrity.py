"""What the check of an installation finds: each change once, at its place, and nothing where nothing was changed."""

import json
import sqlite3
from contextlib import closing

import pytest

from service.errors import Unusable
from service.settings import Settings
from service.store.codec import digest
from service.store.database import FILE_NAME
from service.store.integrity import MOST_NAMED, Checked
from service.workflows.retention import purge
from service.workflows.verify import verify_digests
from tests.jobs import Desk, at
from tests.store.altering import COUNT, alter_result, issue, job_of, only, run_one, sql

DAY = 86_400


@pytest.fixture
def issued(desk: Desk) -> Desk:
    """Six verdicts, on either engine."""
    return issue(desk)


def test_what_nobody_touched_is_right(issued: Desk) -> None:
    checked = verify_digests(issued.database)
    assert checked == Checked(right={"dataset": COUNT, "plan": 1, "result": COUNT, "verdict": COUNT, "chain": 1})


def test_an_altered_result_with_a_digest_to_match_is_named_by_its_verdict(issued: Desk) -> None:
    job_id = job_of(issued, 3)
    alter_result(issued, job_id, with_digest=True, chosen_degree=5)
    sql(
        issued,
        "UPDATE jobs SET verdict = 'inadequate', chosen_degree = 5 WHERE id = :j",
        "UPDATE verdicts SET verdict = 'inadequate' WHERE sequence = 3",
        j=job_id,
    )
    said = only(verify_digests(issued.database))
    assert said.startswith(f"verdict 3 of job {job_id} says")
    word = json.loads(issued.verdict(job_id).document)["verdict"]
    for fault in (
        f"says verdict {word!r}, its own row 'inadequate'",
        f"says verdict {word!r}, its job 'inadequate'",
        "its job 5",
        "its result 5",
        "says result_digest",
    ):
        assert fault in said


def test_a_result_altered_alone_is_named_itself(issued: Desk) -> None:
    job_id = job_of(issued, 3)
    alter_result(issued, job_id, with_digest=False, chosen_degree=5)
    assert only(verify_digests(issued.database)) == f"result {job_id} is not what its digest says"


@pytest.mark.parametrize(
    ("statement", "fault"),
    [
        ("UPDATE jobs SET verdict = 'undecided' WHERE id = :j", "its job 'undecided'"),
        ("UPDATE jobs SET chosen_degree = 7 WHERE id = :j", "its job 7"),
        ("UPDATE jobs SET chosen_degree = NULL WHERE id = :j", "its job None"),
        ("UPDATE jobs SET subject = 'other' WHERE id = :j", "its job 'other'"),
        ("UPDATE jobs SET state = 'failed' WHERE id = :j", "its job is failed"),
        ("UPDATE jobs SET dataset_id = (SELECT min(id) FROM datasets) WHERE id = :j", "says dataset_digest"),
        ("UPDATE jobs SET plan_digest = :p WHERE id = :j", "says plan_digest"),
        ("UPDATE verdicts SET verdict = 'undecided' WHERE job_id = :j", "its own row 'undecided'"),
        ("UPDATE verdicts SET subject = 'other' WHERE job_id = :j", "its own row 'other'"),
        ("UPDATE verdicts SET issued_at = 0 WHERE job_id = :j", "its own row '1970-01-01T00:00:00.000000Z'"),
        ("UPDATE verdicts SET previous = NULL WHERE job_id = :j", "its own row None"),
        ("UPDATE verdicts SET digest = :p WHERE job_id = :j", "is not what its digest says"),
        ("DELETE FROM results WHERE job_id = :j", "its result is missing, and no purge removed it"),
        (
            "UPDATE results SET provenance = (SELECT max(provenance) FROM results AS r JOIN verdicts USING (job_id)"
            " WHERE sequence = 2) WHERE job_id = :j",
            "says result_digest",
        ),
    ],
)
def test_every_row_that_a_verdict_speaks_of_is_held_against_it(issued: Desk, statement: str, fault: str) -> None:
    job_id, plan = job_of(issued, 4), digest(b"{}")
    sql(issued, "INSERT INTO plans (digest, document, created_at) VALUES (:p, '{}', 0)", p=plan)
    values = {"j": job_id} | ({"p": plan} if ":p" in statement else {})
    sql(issued, statement, **values)
    said = only(verify_digests(issued.database))
    assert said.startswith(f"verdict 4 of job {job_id} ")
    assert fault in said


def test_a_dataset_altered_with_a_digest_to_match_is_named_by_its_verdict(issued: Desk) -> None:
    dataset_id = issued.job(job_of(issued, 2)).dataset_id
    sql(issued, "UPDATE datasets SET digest = :d WHERE id = :i", d="0" * 64, i=dataset_id)
    row, verdict = verify_digests(issued.database).mistakes
    assert row == f"dataset {dataset_id} is not what its digest says"
    assert verdict.startswith("verdict 2 of job")
    assert f"its job '{'0' * 64}'" in verdict


def test_numbers_that_are_none_are_a_finding_and_no_crash(issued: Desk) -> None:
    dataset_id = issued.job(job_of(issued, 2)).dataset_id
    for damaged in (b"\xff" * 96, b"\xff" * 95):
        sql(issued, "UPDATE datasets SET x = :x WHERE id = :i", x=damaged, i=dataset_id)
        assert only(verify_digests(issued.database)) == f"dataset {dataset_id} is not what its digest says"


def test_what_a_purge_removed_is_no_finding(issued: Desk) -> None:
    assert purge(issued.database, before=at(DAY), now=at(2 * DAY), dry_run=False).jobs == COUNT
    checked = verify_digests(issued.database)
    assert (checked.wrong, checked.purged, checked.right["verdict"]) == (0, COUNT, COUNT)
    job_id = job_of(issued, 2)
    sql(issued, "UPDATE jobs SET verdict = 'undecided' WHERE id = :j", j=job_id)
    assert only(verify_digests(issued.database)).startswith(f"verdict 2 of job {job_id} says verdict")


def test_a_result_or_word_that_no_verdict_stands_behind_is_named(issued: Desk) -> None:
    waiting = issued.put(COUNT)
    sql(
        issued,
        "INSERT INTO results (job_id, digest, document, provenance) VALUES (:j, :d, '{}', '{}')",
        j=waiting,
        d=digest(b"{}"),
    )
    assert only(verify_digests(issued.database)) == f"result {waiting} belongs to no verdict"
    sql(issued, "DELETE FROM results WHERE job_id = :j", j=waiting)
    sql(issued, "UPDATE jobs SET verdict = 'adequate' WHERE id = :j", j=waiting)
    assert only(verify_digests(issued.database)).startswith(f"job {waiting} is queued, verdict 'adequate'")


def test_all_mistakes_are_counted_and_some_named(issued: Desk) -> None:
    for seed in range(COUNT, MOST_NAMED + 2):
        run_one(issued, seed)
    sql(issued, "UPDATE jobs SET chosen_degree = 9")
    checked = verify_digests(issued.database)
    assert (checked.wrong, len(checked.mistakes)) == (MOST_NAMED + 2, MOST_NAMED)


@pytest.mark.parametrize("engine", ["sqlite"])
def test_sqlite_lets_a_job_go_from_under_its_verdict_and_keeps_anything(issued: Desk, settings: Settings) -> None:
    """Without foreign keys, as its own command-line tool leaves them."""
    job_id, other = job_of(issued, 3), job_of(issued, 5)
    with closing(sqlite3.connect(settings.data_dir / FILE_NAME)) as connection:
        connection.execute("DELETE FROM jobs WHERE id = ?", (job_id,))
        connection.execute("UPDATE verdicts SET document = 7, issued_at = 'noon' WHERE job_id = ?", (other,))
        connection.commit()
    checked = verify_digests(issued.database)
    assert checked.mistakes == [
        f"verdict 5 of job {other} is not what its digest says",
        f"verdict 3 of job {job_id} its job is missing",
    ]
    assert checked.wrong == 2


@pytest.mark.parametrize("engine", ["sqlite"])
def test_a_file_damaged_inside_is_said_to_be(issued: Desk, settings: Settings) -> None:
    with closing(sqlite3.connect(settings.data_dir / FILE_NAME)) as connection:
        connection.execute("UPDATE verdicts SET document = CAST(x'ff' AS TEXT) WHERE sequence = 2")
        connection.commit()
    with pytest.raises(Unusable, match="cannot be read to its end"):
        verify_digests(issued.database)
