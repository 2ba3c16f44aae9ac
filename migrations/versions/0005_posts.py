"""When each submitter last posted a dataset: retention goes by it.

Revision ID: 0005
Revises: 0004
"""

import sqlalchemy as sa
from alembic import op

revision = "0005"
down_revision = "0004"
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.add_column("dataset_posts", sa.Column("posted_at", sa.BigInteger(), nullable=False, server_default="0"))
    # When it was posted again is not known of posts from before; the first time is.
    op.execute(
        "UPDATE dataset_posts SET posted_at ="
        " (SELECT created_at FROM datasets WHERE datasets.id = dataset_posts.dataset_id)"
    )
    op.create_index(op.f("ix_dataset_posts_dataset_id_posted_at"), "dataset_posts", ["dataset_id", "posted_at"])


def downgrade() -> None:
    op.drop_index(op.f("ix_dataset_posts_dataset_id_posted_at"), "dataset_posts")
    op.drop_column("dataset_posts", "posted_at")
