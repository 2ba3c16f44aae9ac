"""The chain of verdicts under alterations: the verdict that was changed is named, and a gap once."""

from typing import Any

import pytest

from service.store import integrity
from service.workflows.verify import verify_digests
from tests.jobs import Desk
from tests.store.altering import COUNT, alter_verdict, issue, job_of, one, only, run_one, sql


@pytest.fixture
def issued(desk: Desk) -> Desk:
    """Six verdicts, on either engine."""
    return issue(desk)


@pytest.mark.parametrize("with_digest", [False, True])
@pytest.mark.parametrize("sequence", [1, 3, COUNT])
def test_an_altered_verdict_is_named_and_no_other(issued: Desk, sequence: int, with_digest: bool) -> None:
    alter_verdict(issued, sequence, with_digest=with_digest)
    said = only(verify_digests(issued.database))
    later = "the end of the chain" if sequence == COUNT else f"verdict {sequence + 1}"
    fault = f"is not the one that {later} speaks of" if with_digest else "is not what its digest says"
    assert said.startswith(f"verdict {sequence} of job {job_of(issued, sequence)} {fault}")


def test_a_verdict_that_is_no_document_is_named_once(issued: Desk) -> None:
    sql(issued, "UPDATE verdicts SET document = 'nothing' WHERE sequence = 3")
    assert only(verify_digests(issued.database)).endswith("is not what its digest says")


@pytest.mark.parametrize(
    ("gone", "place"),
    [
        ((3,), "verdict 3 is missing before verdict 4 "),
        ((1,), "verdict 1 is missing before verdict 2 "),
        ((2, 3, 4), "verdicts 2 to 4 are missing before verdict 5 "),
        ((5, 6), "verdicts 5 to 6 are missing before the end of the chain "),
        ((1, 2, 3, 4, 5, 6), "verdicts 1 to 6 are missing before the end of the chain "),
    ],
)
def test_a_gap_is_reported_once_at_its_place(issued: Desk, gone: tuple[int, ...], place: str) -> None:
    ids = [job_of(issued, sequence) for sequence in gone]
    last = one(issued, "SELECT digest FROM verdicts WHERE sequence = :s", s=gone[-1])
    for sequence in gone:
        sql(issued, "DELETE FROM verdicts WHERE sequence = :s", s=sequence)
    checked = verify_digests(issued.database)
    chain = [mistake for mistake in checked.mistakes if mistake.startswith("chain")]
    assert chain == [f"chain of verdicts has a gap: {place}(digest of the last of them: {last})"]
    without = [mistake.split()[1] for mistake in checked.mistakes if mistake.startswith("job")]
    assert without == ids
    assert checked.wrong == 1 + len(ids)
    assert checked.right.get("verdict", 0) == COUNT - len(gone)
    assert checked.right["result"] == COUNT


def test_two_gaps_and_a_change_are_three_findings(issued: Desk) -> None:
    alter_verdict(issued, 3, with_digest=True)
    sql(issued, "DELETE FROM verdicts WHERE sequence IN (2, 5)")
    kinds = [mistake.split(" of job")[0].split(" missing")[0] for mistake in verify_digests(issued.database).mistakes]
    assert kinds[0] == "verdict 3"
    assert [kind for kind in kinds if kind.startswith("chain")] == [
        "chain of verdicts has a gap: verdict 5 is",
        "chain of verdicts has a gap: verdict 2 is",
    ]
    assert len(kinds) == 5  # the other two: jobs without their verdict


@pytest.mark.parametrize(
    ("statement", "said"),
    [
        ("UPDATE verdict_chain SET length = 3", "goes on to verdict 6, but the end of the chain says that 3"),
        ("UPDATE verdict_chain SET length = 8", "verdicts 7 to 8 are missing before the end of the chain"),
        ("UPDATE verdict_chain SET head = 'x'", "is not the one that the end of the chain speaks of"),
        ("DELETE FROM verdict_chain", "has no end: its row is missing"),
    ],
)
def test_the_end_of_the_chain_is_compared(issued: Desk, statement: str, said: str) -> None:
    sql(issued, statement)
    assert said in only(verify_digests(issued.database))


def test_verdicts_issued_meanwhile_are_no_finding(issued: Desk, monkeypatch: pytest.MonkeyPatch) -> None:
    look = integrity._end

    def slow_look(*arguments: Any) -> Any:
        found = look(*arguments)
        run_one(issued, COUNT)
        return found

    monkeypatch.setattr(integrity, "_end", slow_look)
    assert verify_digests(issued.database).wrong == 0
    assert issued.recorded() == (COUNT + 1, COUNT + 1)
