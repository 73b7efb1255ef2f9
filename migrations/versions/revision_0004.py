"""Which service serves which unit."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0004"
down_revision = "0003"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Make the table."""
    op.create_table(
        "claims",
        sa.Column("unit_id", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("holder", sa.Text(), nullable=False),
        sa.Column("host", sa.Text(), nullable=False),
        sa.Column("process", sa.BigInteger(), nullable=False),
        sa.Column("since_us", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_claims_units")),
        sa.PrimaryKeyConstraint("unit_id", name=op.f("pk_claims")),
        comment="which service serves a unit; whether it is alive tells a lock that ends with its process",
    )
