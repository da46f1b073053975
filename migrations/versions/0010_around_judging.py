"""Around judging: season starts, crop groups, spells without a look, notices, diary, rules.

Revision ID: 0010
Revises: 0004
"""

import sqlalchemy as sa
from alembic import op

from service.store.columns import UtcDateTime

revision = "0010"
down_revision = "0004"
branch_labels = None
depends_on = None

_ID = sa.BigInteger().with_variant(sa.Integer(), "sqlite")


def upgrade() -> None:
    op.add_column("holding", sa.Column("season_start", sa.String(length=5), nullable=True))
    op.add_column("baseline", sa.Column("tuned", sa.JSON(none_as_null=True), nullable=True))
    op.add_column("judgement", sa.Column("p", sa.Float(precision=53), nullable=True))
    op.create_table(
        "crop_group",
        sa.Column("crop", sa.String(length=100), nullable=False),
        sa.Column("group_name", sa.String(length=100), nullable=False),
        sa.PrimaryKeyConstraint("crop"),
    )
    op.create_table(
        "unseen_spell",
        sa.Column("parcel_id", _ID, nullable=False),
        sa.Column("since", UtcDateTime(), nullable=False),
        sa.Column("told_at", UtcDateTime(), nullable=False),
        sa.ForeignKeyConstraint(["parcel_id"], ["parcel.id"]),
        sa.PrimaryKeyConstraint("parcel_id"),
    )
    op.create_table(
        "notice",
        sa.Column("id", sa.String(length=40), nullable=False),
        sa.Column("axis", sa.String(length=5), nullable=False),
        sa.Column("season", sa.Integer(), nullable=False),
        sa.Column("kind", sa.String(length=40), nullable=False),
        sa.Column("state", sa.String(length=20), nullable=False),
        sa.Column("measure", sa.String(length=100), nullable=False),
        sa.Column("shift", sa.Float(precision=53), nullable=False),
        sa.Column("crops", sa.JSON(), nullable=False),
        sa.Column("opened_at", UtcDateTime(), nullable=False),
        sa.Column("closed_at", UtcDateTime(), nullable=True),
        sa.Column("recorded_at", UtcDateTime(), nullable=False),
        sa.Column("revision", sa.Integer(), nullable=False),
        sa.PrimaryKeyConstraint("id"),
    )
    op.create_index("ix_notice_opened", "notice", ["opened_at", "id"], unique=False)
    op.create_index("ix_notice_fold", "notice", ["axis", "season"], unique=False)
    op.create_table(
        "diary",
        sa.Column("id", _ID, nullable=False),
        sa.Column("public_id", sa.String(length=40), nullable=False),
        sa.Column("parcel_id", _ID, nullable=False),
        sa.Column("kind", sa.String(length=20), nullable=False),
        sa.Column("first_on", sa.Date(), nullable=False),
        sa.Column("last_on", sa.Date(), nullable=False),
        sa.Column("note", sa.String(length=2000), nullable=True),
        sa.Column("who", sa.String(length=100), nullable=False),
        sa.Column("recorded_at", UtcDateTime(), nullable=False),
        sa.ForeignKeyConstraint(["parcel_id"], ["parcel.id"]),
        sa.PrimaryKeyConstraint("id"),
        sa.UniqueConstraint("public_id"),
    )
    op.create_index("ix_diary_parcel_id", "diary", ["parcel_id"], unique=False)
    op.create_table(
        "explained",
        sa.Column("alert_id", sa.String(length=40), nullable=False),
        sa.Column("parcel_id", _ID, nullable=False),
        sa.Column("axis", sa.String(length=5), nullable=False),
        sa.Column("season", sa.Integer(), nullable=False),
        sa.Column("rule", sa.String(length=100), nullable=False),
        sa.Column("departed_at", UtcDateTime(), nullable=False),
        sa.Column("cause", sa.String(length=40), nullable=False),
        sa.Column("because", sa.String(length=200), nullable=False),
        sa.Column("recorded_at", UtcDateTime(), nullable=False),
        sa.ForeignKeyConstraint(["parcel_id"], ["parcel.id"]),
        sa.PrimaryKeyConstraint("alert_id"),
    )
    op.create_index("ix_explained_fold", "explained", ["axis", "season"], unique=False)
    op.create_index("ix_explained_parcel_id", "explained", ["parcel_id"], unique=False)
    op.create_table(
        "rule",
        sa.Column("id", sa.String(length=100), nullable=False),
        sa.Column("definition", sa.JSON(), nullable=False),
        sa.Column("revision", sa.Integer(), nullable=False),
        sa.Column("who", sa.String(length=100), nullable=False),
        sa.Column("changed_at", UtcDateTime(), nullable=False),
        sa.PrimaryKeyConstraint("id"),
    )


def downgrade() -> None:
    op.drop_table("rule")
    op.drop_index("ix_explained_parcel_id", table_name="explained")
    op.drop_index("ix_explained_fold", table_name="explained")
    op.drop_table("explained")
    op.drop_index("ix_diary_parcel_id", table_name="diary")
    op.drop_table("diary")
    op.drop_index("ix_notice_fold", table_name="notice")
    op.drop_index("ix_notice_opened", table_name="notice")
    op.drop_table("notice")
    op.drop_table("unseen_spell")
    op.drop_table("crop_group")
    op.drop_column("judgement", "p")
    op.drop_column("baseline", "tuned")
    op.drop_column("holding", "season_start")
