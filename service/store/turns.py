"""Fairness between submitters: within one priority they take turns, one job each, however many each has waiting.

Every job gets its turn when it is put in: one after the submitter's last waiting job of that priority or, where the
submitter has none, the turn that is being served now. Claims go by priority, then turn, then time. So ten thousand
jobs of one submitter stand at turns 1 to 10,000, and a single job of another is served beside the first of them. (In
the literature: fair queueing by virtual start times, with one job as the unit of service; Demers, Keshav and Shenker,
SIGCOMM 1989.) Two posts at once may get the same turn, which costs no more than one place.

Each term is the end of one index of waiting jobs, so putting in and claiming cost the same at any length of the queue.
"""

from typing import Any

from sqlalchemy import ColumnElement, func, select

from service.store.tables import WAITING, jobs

STALEST_EVERY = 8  # one claim in so many goes by turn alone, so that no stream of urgent jobs starves the others


def next_turn(submitted_by: ColumnElement[str] | str, priority: ColumnElement[int] | int) -> ColumnElement[int]:
    """The turn of a new job, as an expression for its INSERT."""
    mine = select(func.max(jobs.c.turn) + 1).where(
        WAITING, jobs.c.submitted_by == submitted_by, jobs.c.priority == priority
    )
    served = select(func.min(jobs.c.turn)).where(WAITING, jobs.c.priority == priority)
    anywhere = select(func.min(jobs.c.turn)).where(WAITING)
    return func.coalesce(mine.scalar_subquery(), served.scalar_subquery(), anywhere.scalar_subquery(), 0)


def order(*, stalest: bool) -> tuple[ColumnElement[Any], ...]:
    """What the next claim goes by."""
    by_turn = (jobs.c.turn.asc(), jobs.c.id.asc())
    return by_turn if stalest else (jobs.c.priority.desc(), *by_turn)
