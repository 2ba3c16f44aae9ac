"""First tables.

Revision ID: 0001
Revises: none
"""

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.create_table(
        "datasets",
        sa.Column("id", sa.String(length=36), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("subject", sa.Text(), nullable=False),
        sa.Column("created_at", sa.BigInteger(), nullable=False),
        sa.Column("points", sa.Integer(), nullable=False),
        sa.Column("summary", sa.Text(), nullable=False),
        sa.Column("details", sa.Text(), nullable=False),
        sa.Column("series", sa.Text(), nullable=True),
        sa.Column("x", sa.LargeBinary(), nullable=False),
        sa.Column("y", sa.LargeBinary(), nullable=False),
        sa.Column("u_x", sa.LargeBinary(), nullable=True),
        sa.Column("u_y", sa.LargeBinary(), nullable=True),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_datasets")),
        sa.UniqueConstraint("digest", name=op.f("uq_datasets_digest")),
    )
    op.create_index(op.f("ix_datasets_subject_id"), "datasets", ["subject", "id"])

    op.create_table(
        "plans",
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("document", sa.Text(), nullable=False),
        sa.Column("created_at", sa.BigInteger(), nullable=False),
        sa.PrimaryKeyConstraint("digest", name=op.f("pk_plans")),
    )
    op.create_table(
        "verdict_chain",
        sa.Column("id", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("length", sa.BigInteger(), nullable=False),
        sa.Column("head", sa.String(length=64), nullable=True),
        sa.CheckConstraint("id = 1", name=op.f("ck_verdict_chain_one_row")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_verdict_chain")),
    )
    op.create_table(
        "jobs",
        sa.Column("id", sa.String(length=36), nullable=False),
        sa.Column("state", sa.String(length=16), nullable=False),
        sa.Column("dataset_id", sa.String(length=36), nullable=False),
        sa.Column("plan_digest", sa.String(length=64), nullable=False),
        sa.Column("subject", sa.Text(), nullable=False),
        sa.Column("submitted_by", sa.Text(), nullable=False),
        sa.Column("priority", sa.Integer(), nullable=False),
        sa.Column("queued_at", sa.BigInteger(), nullable=False),
        sa.Column("run_after", sa.BigInteger(), nullable=False),
        sa.Column("dispatched_at", sa.BigInteger(), nullable=False),
        sa.Column("attempts", sa.Integer(), nullable=False),
        sa.Column("token", sa.String(length=36), nullable=True),
        sa.Column("lease_until", sa.BigInteger(), nullable=True),
        sa.Column("worker", sa.Text(), nullable=True),
        sa.Column("started_at", sa.BigInteger(), nullable=True),
        sa.Column("finished_at", sa.BigInteger(), nullable=True),
        sa.Column("stage", sa.Text(), nullable=True),
        sa.Column("stage_done", sa.Integer(), nullable=True),
        sa.Column("stage_of", sa.Integer(), nullable=True),
        sa.Column("error", sa.Text(), nullable=True),
        sa.Column("verdict", sa.String(length=16), nullable=True),
        sa.Column("chosen_degree", sa.Integer(), nullable=True),
        sa.CheckConstraint(
            "state <> 'running' OR (token IS NOT NULL AND lease_until IS NOT NULL)",
            name=op.f("ck_jobs_running_is_held"),
        ),
        sa.CheckConstraint(
            "state IN ('queued', 'running', 'succeeded', 'failed', 'cancelled')", name=op.f("ck_jobs_state_known")
        ),
        sa.ForeignKeyConstraint(["dataset_id"], ["datasets.id"], name=op.f("fk_jobs_dataset_id_datasets")),
        sa.ForeignKeyConstraint(["plan_digest"], ["plans.digest"], name=op.f("fk_jobs_plan_digest_plans")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_jobs")),
    )
    op.create_index(op.f("ix_jobs_dataset_id"), "jobs", ["dataset_id"])
    op.create_index(op.f("ix_jobs_state_run_after"), "jobs", ["state", "run_after"])
    op.create_index(op.f("ix_jobs_subject_id"), "jobs", ["subject", "id"])
    op.create_index(op.f("ix_jobs_submitted_by_id"), "jobs", ["submitted_by", "id"])
    op.create_index(op.f("ix_jobs_verdict_id"), "jobs", ["verdict", "id"])

    op.create_table(
        "job_events",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), autoincrement=True, nullable=False),
        sa.Column("job_id", sa.String(length=36), nullable=False),
        sa.Column("at", sa.BigInteger(), nullable=False),
        sa.Column("kind", sa.String(length=16), nullable=False),
        sa.Column("detail", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["job_id"], ["jobs.id"], name=op.f("fk_job_events_job_id_jobs")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_job_events")),
    )
    op.create_index(op.f("ix_job_events_job_id_id"), "job_events", ["job_id", "id"])

    op.create_table(
        "results",
        sa.Column("job_id", sa.String(length=36), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("document", sa.Text(), nullable=False),
        sa.Column("provenance", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["job_id"], ["jobs.id"], name=op.f("fk_results_job_id_jobs")),
        sa.PrimaryKeyConstraint("job_id", name=op.f("pk_results")),
    )
    op.create_table(
        "verdicts",
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("job_id", sa.String(length=36), nullable=False),
        sa.Column("subject", sa.Text(), nullable=False),
        sa.Column("verdict", sa.String(length=16), nullable=False),
        sa.Column("issued_at", sa.BigInteger(), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("previous", sa.String(length=64), nullable=True),
        sa.Column("document", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["job_id"], ["jobs.id"], name=op.f("fk_verdicts_job_id_jobs")),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_verdicts")),
        sa.UniqueConstraint("digest", name=op.f("uq_verdicts_digest")),
        sa.UniqueConstraint("job_id", name=op.f("uq_verdicts_job_id")),
    )
    op.create_index(op.f("ix_verdicts_subject_sequence"), "verdicts", ["subject", "sequence"])

    op.bulk_insert(
        sa.table("verdict_chain", sa.column("id", sa.Integer), sa.column("length", sa.BigInteger)),
        [{"id": 1, "length": 0}],
    )


def downgrade() -> None:
    for table in ("verdicts", "results", "job_events", "jobs", "verdict_chain", "plans", "datasets"):
        op.drop_table(table)
