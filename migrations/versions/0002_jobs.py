"""Jobs: work that takes longer than a request.

Revision ID: 0002
Revises: 0001
"""

import sqlalchemy as sa
from alembic import op

from service.store.columns import UtcDateTime

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.create_table(
        "job",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("public_id", sa.String(length=40), nullable=False),
        sa.Column("kind", sa.String(length=20), nullable=False),
        sa.Column(
            "api_key_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False
        ),
        sa.Column("holdings", sa.JSON(none_as_null=True), nullable=True),
        sa.Column("asked", sa.JSON(), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("fingerprint", sa.String(length=64), nullable=False),
        sa.Column("state", sa.String(length=20), nullable=False),
        sa.Column("progress", sa.Float(precision=53), nullable=False),
        sa.Column("result", sa.JSON(none_as_null=True), nullable=True),
        sa.Column("failure", sa.JSON(none_as_null=True), nullable=True),
        sa.Column("created_at", UtcDateTime(), nullable=False),
        sa.Column("changed_at", UtcDateTime(), nullable=False),
        sa.ForeignKeyConstraint(["api_key_id"], ["api_key.id"]),
        sa.PrimaryKeyConstraint("id"),
        sa.UniqueConstraint("public_id"),
    )
    op.create_index("ix_job_state", "job", ["state"], unique=False)


def downgrade() -> None:
    op.drop_index("ix_job_state", table_name="job")
    op.drop_table("job")
