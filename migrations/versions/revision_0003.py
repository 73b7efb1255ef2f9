"""When tests rest and why."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0003"
down_revision = "0002"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Make the table."""
    op.create_table(
        "rests",
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("cause", sa.Text(), nullable=False),
        sa.Column("tag", sa.Text(), nullable=False),
        sa.Column("since_us", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("until_us", sa.BigInteger(), nullable=True),
        sa.Column("why", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_rests_units")),
        sa.PrimaryKeyConstraint("unit_id", "cause", "tag", "since_us", name=op.f("pk_rests")),
        comment="when tests of innovations rested and why; an empty tag means all sensors",
    )
