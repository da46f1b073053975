"""How the parts of a scene were found, where it came as a STAC Item.

Revision ID: 0004
Revises: 0003
"""

import sqlalchemy as sa
from alembic import op

revision = "0004"
down_revision = "0003"
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.add_column("scene", sa.Column("found", sa.JSON(none_as_null=True), nullable=True))


def downgrade() -> None:
    op.drop_column("scene", "found")
