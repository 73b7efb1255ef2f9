"""What people decide about sensors and tests, and when sensors are left out."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None

IDENTITY = sa.BigInteger().with_variant(sa.Integer(), "sqlite")


def upgrade() -> None:
    """Make the two tables."""
    op.create_table(
        "decisions",
        sa.Column("id", IDENTITY, autoincrement=True, nullable=False),
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("act", sa.Text(), nullable=False),
        sa.Column("tag", sa.Text(), nullable=True),
        sa.Column("flag_id", sa.Text(), nullable=True),
        sa.Column("occasion", sa.Text(), nullable=True),
        sa.Column("seconds", sa.Double(), nullable=True),
        sa.Column("actor", sa.Text(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("decided_us", sa.BigInteger(), nullable=False),
        sa.Column("taken_cycle", sa.BigInteger(), nullable=True),
        sa.Column("taken_us", sa.BigInteger(), nullable=True),
        sa.Column("until_us", sa.BigInteger(), nullable=True),
        sa.Column("refusal", sa.Text(), nullable=True),
        sa.CheckConstraint(
            "act IN ('put back', 'leave out', 'rest', 'go on')", name=op.f("ck_decisions_act")
        ),
        sa.ForeignKeyConstraint(["flag_id"], ["flags.id"], name=op.f("fk_decisions_flags")),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_decisions_units")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_decisions")),
        comment="what people decided; the last four columns are empty until a cycle has taken it",
    )
    op.create_index(op.f("ix_decisions_unit_id_taken_us"), "decisions", ["unit_id", "taken_us"], unique=False)
    op.create_index(op.f("ix_decisions_flag_id"), "decisions", ["flag_id"], unique=False)
    op.create_table(
        "left_out",
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("tag", sa.Text(), nullable=False),
        sa.Column("since_us", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("by_person", sa.Boolean(), nullable=False),
        sa.Column("until_us", sa.BigInteger(), nullable=True),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_left_out_units")),
        sa.PrimaryKeyConstraint("unit_id", "tag", "since_us", "by_person", name=op.f("pk_left_out")),
        comment="when each sensor was kept from the estimate",
    )
