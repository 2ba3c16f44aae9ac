"""The clock that all hosts share."""

from datetime import UTC, datetime, timedelta

import pytest

from service.store import shared_clock
from service.store.database import Database
from service.store.shared_clock import SharedClock


def test_a_host_whose_clock_is_wrong_is_put_right(database: Database, monkeypatch: pytest.MonkeyPatch) -> None:
    """On SQLite there is only one host, and its clock is what counts."""
    monkeypatch.setattr(shared_clock, "utc_now", lambda: datetime.now(UTC) + timedelta(minutes=7))
    clock = SharedClock(database)
    clock.keep_right()
    error = abs(clock() - datetime.now(UTC))
    assert error < timedelta(minutes=1) if database.postgres else error > timedelta(minutes=6)


def test_it_is_asked_once_a_minute_at_most(database: Database, monkeypatch: pytest.MonkeyPatch) -> None:
    clock = SharedClock(database)
    clock.keep_right()

    def never(_self: Database) -> None:
        raise AssertionError

    monkeypatch.setattr(Database, "read", never)
    clock.keep_right()
