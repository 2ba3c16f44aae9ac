"""Keys, safe repeats, named plans, batches, notifications.

Revision ID: 0003
Revises: 0002
"""

import sqlalchemy as sa
from alembic import op

revision = "0003"
down_revision = "0002"
branch_labels = None
depends_on = None

ID = sa.String(length=36)
DIGEST = sa.String(length=64)


def upgrade() -> None:
    op.create_table(
        "keys",
        sa.Column("id", ID, nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("role", sa.String(length=16), nullable=False),
        sa.Column("hash", DIGEST, nullable=False),
        sa.Column("notify_secret", sa.Text(), nullable=False),
        sa.Column("created_at", sa.BigInteger(), nullable=False),
        sa.Column("revoked_at", sa.BigInteger(), nullable=True),
        sa.CheckConstraint("role IN ('submit', 'read', 'admin')", name=op.f("ck_keys_role_known")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_keys")),
        sa.UniqueConstraint("hash", name=op.f("uq_keys_hash")),
        sa.UniqueConstraint("name", name=op.f("uq_keys_name")),
    )
    op.create_table(
        "dataset_posts",
        sa.Column("dataset_id", ID, nullable=False),
        sa.Column("submitted_by", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["dataset_id"], ["datasets.id"], name=op.f("fk_dataset_posts_dataset_id_datasets")),
        sa.PrimaryKeyConstraint("submitted_by", "dataset_id", name=op.f("pk_dataset_posts")),
    )
    # Datasets from before belong to whoever ran a job on them.
    op.execute(
        "INSERT INTO dataset_posts (dataset_id, submitted_by) SELECT DISTINCT dataset_id, submitted_by FROM jobs"
    )
    op.create_table(
        "repeats",
        sa.Column("submitted_by", sa.Text(), nullable=False),
        sa.Column("key", sa.Text(), nullable=False),
        sa.Column("fingerprint", DIGEST, nullable=False),
        sa.Column("made_id", ID, nullable=False),
        sa.Column("created_at", sa.BigInteger(), nullable=False),
        sa.PrimaryKeyConstraint("submitted_by", "key", name=op.f("pk_repeats")),
    )
    op.create_index(op.f("ix_repeats_created_at"), "repeats", ["created_at"])
    op.create_table(
        "named_plans",
        sa.Column("id", ID, nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("version", sa.Integer(), nullable=False),
        sa.Column("plan_digest", DIGEST, nullable=False),
        sa.Column("created_by", sa.Text(), nullable=False),
        sa.Column("created_at", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["plan_digest"], ["plans.digest"], name=op.f("fk_named_plans_plan_digest_plans")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_named_plans")),
        sa.UniqueConstraint("name", "version", name=op.f("uq_named_plans_name_version")),
    )
    op.create_table(
        "batches",
        sa.Column("id", ID, nullable=False),
        sa.Column("submitted_by", sa.Text(), nullable=False),
        sa.Column("plan_digest", DIGEST, nullable=False),
        sa.Column("created_at", sa.BigInteger(), nullable=False),
        sa.Column("size", sa.Integer(), nullable=False),
        sa.ForeignKeyConstraint(["plan_digest"], ["plans.digest"], name=op.f("fk_batches_plan_digest_plans")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_batches")),
    )
    op.create_index(op.f("ix_batches_submitted_by_id"), "batches", ["submitted_by", "id"])
    op.create_table(
        "batch_items",
        sa.Column("batch_id", ID, nullable=False),
        sa.Column("position", sa.Integer(), nullable=False),
        sa.Column("job_id", ID, nullable=True),
        sa.Column("error", sa.Text(), nullable=True),
        sa.CheckConstraint("(job_id IS NULL) <> (error IS NULL)", name=op.f("ck_batch_items_taken_or_refused")),
        sa.ForeignKeyConstraint(["batch_id"], ["batches.id"], name=op.f("fk_batch_items_batch_id_batches")),
        sa.ForeignKeyConstraint(["job_id"], ["jobs.id"], name=op.f("fk_batch_items_job_id_jobs")),
        sa.PrimaryKeyConstraint("batch_id", "position", name=op.f("pk_batch_items")),
    )
    op.create_index(op.f("ix_batch_items_job_id"), "batch_items", ["job_id"])
    op.create_table(
        "notifications",
        sa.Column("job_id", ID, nullable=False),
        sa.Column("url", sa.Text(), nullable=False),
        sa.Column("state", sa.String(length=16), nullable=False),
        sa.Column("attempts", sa.Integer(), nullable=False),
        sa.Column("next_at", sa.BigInteger(), nullable=True),
        sa.Column("last_at", sa.BigInteger(), nullable=True),
        sa.Column("last_answer", sa.Text(), nullable=True),
        sa.CheckConstraint("state IN ('waiting', 'delivered', 'given_up')", name=op.f("ck_notifications_state_known")),
        sa.ForeignKeyConstraint(["job_id"], ["jobs.id"], name=op.f("fk_notifications_job_id_jobs")),
        sa.PrimaryKeyConstraint("job_id", name=op.f("pk_notifications")),
    )
    op.create_index(op.f("ix_notifications_state_next_at"), "notifications", ["state", "next_at"])


def downgrade() -> None:
    for table in ("notifications", "batch_items", "batches", "named_plans", "repeats", "dataset_posts", "keys"):
        op.drop_table(table)
