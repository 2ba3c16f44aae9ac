"""Priorities and fair turns, and that finding the next job costs the same at any length of the queue."""

from datetime import timedelta
from typing import Any

import pytest
from sqlalchemy import insert, select, text, update
from sqlalchemy.dialects import postgresql, sqlite

from service.store.clock import new_id
from service.store.tables import WAITING, State, jobs
from service.store.turns import STALEST_EVERY, next_turn, order
from service.workflows.run import hand_back
from tests.jobs import Desk, at

MANY = 19_000


def take_all(desk: Desk, *, stalest: bool = False) -> list[tuple[str, int]]:
    taken = []
    while (claim := desk.take(stalest=stalest)) is not None:
        taken.append((claim.submitted_by, claim.priority))
    return taken


def test_of_one_submitter_first_in_is_first_out(desk: Desk) -> None:
    ids = [desk.put(seed) for seed in range(5)]
    assert [desk.took().job_id for _ in ids] == ids


def test_the_more_urgent_goes_first(desk: Desk) -> None:
    for seed, priority in enumerate([0, 5, -3, 5, 9]):
        desk.put(seed, priority=priority)
    assert [priority for _, priority in take_all(desk)] == [9, 5, 5, 0, -3]


def test_one_job_of_another_is_served_beside_the_first_of_many(desk: Desk) -> None:
    for seed in range(40):
        desk.put(seed, by="anna")
    for _ in range(10):
        desk.took()
    desk.put(100, by="bert")
    assert "bert" in [desk.took().submitted_by for _ in range(2)]


def test_submitters_take_turns(desk: Desk) -> None:
    for seed in range(6):
        desk.put(seed, by="anna")
    for seed in range(6, 9):
        desk.put(seed, by="bert")
    for seed in range(9, 12):
        desk.put(seed, by="cleo")
    served = [name for name, _ in take_all(desk)]
    for turn in range(3):
        assert sorted(served[3 * turn : 3 * turn + 3]) == ["anna", "bert", "cleo"]
    assert served[9:] == ["anna"] * 3


def test_who_waited_before_does_not_wait_behind_who_comes_later(desk: Desk) -> None:
    for seed in range(3):
        desk.put(seed, by="anna")
    for seed in range(3, 30):
        desk.put(seed, by="bert")
    for _ in range(4):
        desk.took()
    for seed in range(30, 33):
        desk.put(seed, by="cleo")
    served = [desk.took().submitted_by for _ in range(6)]
    assert served.count("cleo") >= 2
    assert "anna" in served[:3]


def test_a_job_that_runs_again_keeps_its_turn(desk: Desk) -> None:
    first = desk.put(1)
    claim = desk.took()
    for seed in range(2, 6):
        desk.put(seed)
    assert claim.job_id == first
    hand_back(desk.database, claim, reason="test", now=at(0), wait=timedelta())
    assert desk.took().job_id == first


def test_urgent_work_without_end_does_not_starve_the_rest(desk: Desk) -> None:
    for seed in range(12):
        desk.put(seed, by="anna", priority=9)
    for _ in range(4):
        desk.took()
    waiting = desk.put(50, by="bert", priority=0)
    assert desk.took().priority == 9
    # every eighth claim of a worker goes by turn alone; at most two of those are needed here
    assert waiting in [desk.take(stalest=True).job_id for _ in range(2)]  # type: ignore[union-attr]
    assert STALEST_EVERY == 8


@pytest.fixture
def long_queue(desk: Desk) -> Desk:
    """Nineteen thousand waiting jobs of one submitter, made by copying one row."""
    desk.put(by="anna")
    with desk.database.write() as connection:
        row = dict(connection.execute(select(jobs)).mappings().one())
        rows: list[dict[str, Any]] = [row | {"id": new_id(), "turn": turn} for turn in range(1, MANY)]
        connection.execute(insert(jobs), rows)
        ended = {"state": State.SUCCEEDED}
        connection.execute(insert(jobs), [row | ended | {"id": new_id(), "turn": 0} for _ in range(MANY)])
        connection.execute(text("ANALYZE"))
    return desk


def test_the_next_job_is_found_by_an_index_alone(long_queue: Desk) -> None:
    for stalest, index in ((False, "ix_jobs_next"), (True, "ix_jobs_turn")):
        first = select(jobs.c.id).where(WAITING, jobs.c.run_after <= at(0)).order_by(*order(stalest=stalest)).limit(1)
        plan = explain(long_queue, first)
        assert index in plan
        assert "Sort" not in plan
        assert "TEMP B-TREE" not in plan
        claim = update(jobs).where(jobs.c.id == first.scalar_subquery(), WAITING).values(worker="w")
        plan = explain(long_queue, claim)
        assert "Seq Scan" not in plan
        assert "SCAN jobs\n" not in plan
    plan = explain(long_queue, select(next_turn("anna", 0)))
    assert plan.count("ix_jobs_") == 3
    assert "Seq Scan" not in plan
    bert = long_queue.put(7, by="bert")
    assert bert in [long_queue.took().job_id for _ in range(2)]


def explain(desk: Desk, query: Any) -> str:
    """The engine's plan as text."""
    dialect = postgresql.dialect() if desk.database.postgres else sqlite.dialect()
    statement = str(query.compile(dialect=dialect, compile_kwargs={"literal_binds": True}))
    prefix = "EXPLAIN" if desk.database.postgres else "EXPLAIN QUERY PLAN"
    with desk.database.read() as connection:
        return "\n".join(str(row[-1]) for row in connection.exec_driver_sql(f"{prefix} {statement}"))
