"""Fair turns among submitters; indexes of the queue that hold only what waits.

Revision ID: 0002
Revises: 0001
"""

import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None

WAITING = sa.text("state = 'queued'")
QUEUE_INDEXES: dict[str, list[str | sa.TextClause]] = {
    "ix_jobs_next": [sa.text("priority DESC"), "turn", "id", "run_after"],
    "ix_jobs_turn": ["turn", "id"],
    "ix_jobs_submitter_turn": ["submitted_by", "priority", "turn"],
}


def upgrade() -> None:
    # Jobs that wait from before all get turn 0: they go in order of priority and time, as they would have.
    op.add_column("jobs", sa.Column("turn", sa.BigInteger(), nullable=False, server_default="0"))
    op.drop_column("jobs", "dispatched_at")  # the sweep compares numbers of jobs and messages instead
    op.drop_index("ix_jobs_state_run_after", "jobs")
    op.create_index("ix_jobs_state_id", "jobs", ["state", "id"])
    for name, columns in QUEUE_INDEXES.items():
        op.create_index(name, "jobs", columns, sqlite_where=WAITING, postgresql_where=WAITING)


def downgrade() -> None:
    for name in QUEUE_INDEXES:
        op.drop_index(name, "jobs")
    op.drop_index("ix_jobs_state_id", "jobs")
    op.create_index("ix_jobs_state_run_after", "jobs", ["state", "run_after"])
    op.add_column("jobs", sa.Column("dispatched_at", sa.BigInteger(), nullable=False, server_default="0"))
    op.drop_column("jobs", "turn")
