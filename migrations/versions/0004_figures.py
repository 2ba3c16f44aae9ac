"""Figures kept, sessions of the pages.

Revision ID: 0004
Revises: 0003
"""

import sqlalchemy as sa
from alembic import op

revision = "0004"
down_revision = "0003"
branch_labels = None
depends_on = None

ID = sa.String(length=36)
DIGEST = sa.String(length=64)


def upgrade() -> None:
    op.create_table(
        "figures",
        sa.Column("job_id", ID, nullable=False),
        sa.Column("name", sa.String(length=16), nullable=False),
        sa.Column("format", sa.String(length=8), nullable=False),
        sa.Column("version", sa.Integer(), nullable=False),
        sa.Column("digest", DIGEST, nullable=False),
        sa.Column("data", sa.LargeBinary(), nullable=False),
        sa.Column("made_at", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["job_id"], ["jobs.id"], name=op.f("fk_figures_job_id_jobs"), ondelete="CASCADE"),
        sa.PrimaryKeyConstraint("job_id", "name", "format", name=op.f("pk_figures")),
    )
    op.create_table(
        "sessions",
        sa.Column("hash", DIGEST, nullable=False),
        sa.Column("key_id", ID, nullable=False),
        sa.Column("created_at", sa.BigInteger(), nullable=False),
        sa.Column("expires_at", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["key_id"], ["keys.id"], name=op.f("fk_sessions_key_id_keys"), ondelete="CASCADE"),
        sa.PrimaryKeyConstraint("hash", name=op.f("pk_sessions")),
    )
    op.create_index(op.f("ix_sessions_key_id"), "sessions", ["key_id"])
    op.create_index(op.f("ix_sessions_expires_at"), "sessions", ["expires_at"])


def downgrade() -> None:
    for table in ("sessions", "figures"):
        op.drop_table(table)
