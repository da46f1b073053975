"""Judging resumes: from when on a season is wanted, and what folds remember after passes.

What was remembered at the end of seasons is dropped, and all of them are judged anew.

Revision ID: 0011
Revises: 0010
"""

import sqlalchemy as sa
from alembic import op

from service.store.columns import UtcDateTime

revision = "0011"
down_revision = "0010"
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.add_column("season_fold", sa.Column("wanted_from", UtcDateTime(), nullable=True))
    op.drop_column("season_fold", "state")
    op.create_table(
        "fold_state",
        sa.Column("axis", sa.String(length=5), nullable=False),
        sa.Column("season", sa.Integer(), nullable=False),
        sa.Column("seen_until", UtcDateTime(), nullable=False),
        sa.Column("pass_at", UtcDateTime(), nullable=False),
        sa.Column("number", sa.Integer(), nullable=False),
        sa.Column("basis", sa.String(length=64), nullable=False),
        sa.Column("state", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(
            ["axis", "season"], ["season_fold.axis", "season_fold.season"], ondelete="CASCADE"
        ),
        sa.PrimaryKeyConstraint("axis", "season", "seen_until"),
    )
    op.execute("UPDATE season_fold SET wanted = wanted + 1")


def downgrade() -> None:
    op.drop_table("fold_state")
    op.add_column("season_fold", sa.Column("state", sa.LargeBinary(), nullable=True))
    op.drop_column("season_fold", "wanted_from")
