"""Sensor profiles of one's own, by version.

Revision ID: 0003
Revises: 0002
"""

import sqlalchemy as sa
from alembic import op

from service.store.columns import UtcDateTime

revision = "0003"
down_revision = "0002"
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.create_table(
        "sensor_profile",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("sensor", sa.String(length=100), nullable=False),
        sa.Column("version", sa.Integer(), nullable=False),
        sa.Column("document", sa.JSON(), nullable=False),
        sa.Column("recorded_at", UtcDateTime(), nullable=False),
        sa.PrimaryKeyConstraint("id"),
    )
    op.create_index(
        "ux_sensor_profile_version", "sensor_profile", ["sensor", "version"], unique=True
    )


def downgrade() -> None:
    op.drop_index("ux_sensor_profile_version", table_name="sensor_profile")
    op.drop_table("sensor_profile")
