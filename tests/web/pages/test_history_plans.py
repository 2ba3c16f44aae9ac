"""A page of a long history is read by indexes on either engine: no whole table is read or sorted.

How long that takes is measured by tests/benchmarks/history.py.
"""

import pytest

from service.store.database import Database
from tests.history import crowd, plans_of

INDEX = {
    "nothing": ("sqlite_autoindex_jobs_1", "pk_jobs"),
    "subject": ("ix_jobs_subject_id",),
    "state": ("ix_jobs_state_id",),
    "verdict": ("ix_jobs_verdict_id",),
    "submitter": ("ix_jobs_submitted_by_id", "ix_jobs_submitter_turn"),
    "submitter, succeeded": ("ix_jobs_submitted_by_id",),
    "since": ("sqlite_autoindex_jobs_1", "pk_jobs"),
    "until": ("sqlite_autoindex_jobs_1", "pk_jobs"),
}
FORBIDDEN = ("Seq Scan", "USE TEMP B-TREE")


@pytest.mark.long
def test_every_filter_goes_by_an_index(database: Database):
    # PostgreSQL analyses by itself; SQLite does not, and must find the same way without.
    crowd(database, 20_000, analyse=database.postgres)
    plans = plans_of(database)
    assert plans.keys() == INDEX.keys()
    for name, words in plans.items():
        assert any(index in words for index in INDEX[name]), (name, words)
        assert not any(bad in words for bad in FORBIDDEN), (name, words)
