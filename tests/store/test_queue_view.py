"""What those who look after the queue are told of it."""

from service.store.queue_view import MOST_SUBMITTERS
from service.workflows.callers import LOCAL, Caller
from service.workflows.queue_view import queue_now
from tests.jobs import Desk, at


def test_totals_are_of_all_submitters_though_few_are_named(desk: Desk) -> None:
    desk.put(by="z")  # the oldest, and the last by name
    for number in range(MOST_SUBMITTERS + 5):
        desk.put(by=f"line {number:02}", seconds=100)
    desk.put(by="line 54", seconds=200)
    seen = queue_now(desk.database, LOCAL, at(1000))
    assert (seen.queued, seen.oldest_seconds) == (MOST_SUBMITTERS + 7, 1000)
    assert len(seen.waiting) == MOST_SUBMITTERS
    assert (seen.waiting[0].submitted_by, seen.waiting[0].jobs) == ("line 54", 2)
    assert "z" not in [one.submitted_by for one in seen.waiting]
    own = queue_now(desk.database, Caller(name="line 54", role="submit"), at(1000))
    assert (own.queued, own.oldest_seconds) == (2, 900)


def test_an_empty_queue(desk: Desk) -> None:
    seen = queue_now(desk.database, LOCAL, at(0))
    assert (seen.queued, seen.oldest_seconds, seen.waiting) == (0, None, ())
