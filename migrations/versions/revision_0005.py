"""With each flag the interval of its onset, and what was weighed with which probability; empty in flags from before."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0005"
down_revision = "0004"
branch_labels = None
depends_on = None


def upgrade() -> None:
    """Add the columns; entries of the audit trail stay as they were written."""
    op.add_column("flags", sa.Column("onset_from_us", sa.BigInteger(), nullable=True))
    op.add_column("flags", sa.Column("onset_to_us", sa.BigInteger(), nullable=True))
    op.add_column("flags", sa.Column("hypotheses", sa.Text(), nullable=True))
