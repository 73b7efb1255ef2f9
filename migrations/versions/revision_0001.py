"""The first tables, and the triggers that make the audit trail append-only."""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None

IDENTITY = sa.BigInteger().with_variant(sa.Integer(), "sqlite")
NO_HASH = "0" * 64

SQLITE_GUARD = """
CREATE TRIGGER audit_trail_no_{event} BEFORE {event} ON audit_trail
BEGIN SELECT RAISE(ABORT, 'the audit trail is append-only'); END
"""
SQLITE_NO_REPLACE = """
CREATE TRIGGER audit_trail_no_replace BEFORE INSERT ON audit_trail
WHEN EXISTS (SELECT 1 FROM audit_trail WHERE sequence = NEW.sequence OR hash = NEW.hash
             OR previous_hash = NEW.previous_hash)
BEGIN SELECT RAISE(ABORT, 'the audit trail is append-only'); END
"""
"""INSERT OR REPLACE deletes without firing the trigger on deletes."""
POSTGRESQL_REFUSAL = """
CREATE FUNCTION audit_trail_refuse() RETURNS trigger LANGUAGE plpgsql AS
$$ BEGIN RAISE EXCEPTION 'the audit trail is append-only'; END $$
"""
POSTGRESQL_GUARD = """
CREATE TRIGGER audit_trail_no_{event} BEFORE {event} ON audit_trail
FOR EACH STATEMENT EXECUTE FUNCTION audit_trail_refuse()
"""


def upgrade() -> None:
    """Make every table, in the order of their references, then guard the audit trail."""
    make_plant()
    make_calculation()
    make_happenings()
    make_trail()
    guard_trail()


def make_plant() -> None:
    """Units and the revisions of their models."""
    op.create_table(
        "units",
        sa.Column("id", IDENTITY, autoincrement=True, nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("title", sa.Text(), nullable=False),
        sa.Column("created_us", sa.BigInteger(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_units")),
        sa.UniqueConstraint("name", name=op.f("uq_units_name")),
    )
    op.create_table(
        "model_revisions",
        sa.Column("id", IDENTITY, autoincrement=True, nullable=False),
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("digest", sa.String(length=64), nullable=False),
        sa.Column("file_text", sa.Text(), nullable=False),
        sa.Column("arrays", sa.LargeBinary(), nullable=False),
        sa.Column("created_us", sa.BigInteger(), nullable=False),
        sa.Column("state", sa.Text(), nullable=False),
        sa.Column("actor", sa.Text(), nullable=False),
        sa.CheckConstraint(
            "state IN ('draft', 'in parallel run', 'in service', 'withdrawn')",
            name=op.f("ck_model_revisions_state"),
        ),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_model_revisions_units")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_model_revisions")),
    )
    op.create_index(
        op.f("ix_model_revisions_unit_id_digest"), "model_revisions", ["unit_id", "digest"], unique=False
    )


def make_calculation() -> None:
    """What each cycle used and gave."""
    op.create_table(
        "cycles",
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("cycle", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("revision_id", sa.BigInteger(), nullable=False),
        sa.Column("time_us", sa.BigInteger(), nullable=False),
        sa.Column("u", sa.LargeBinary(), nullable=False),
        sa.Column("u_quality", sa.LargeBinary(), nullable=False),
        sa.Column("y", sa.LargeBinary(), nullable=False),
        sa.Column("y_quality", sa.LargeBinary(), nullable=False),
        sa.Column("decisions", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(
            ["revision_id"], ["model_revisions.id"], name=op.f("fk_cycles_model_revisions")
        ),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_cycles_units")),
        sa.PrimaryKeyConstraint("unit_id", "cycle", name=op.f("pk_cycles")),
        sa.UniqueConstraint("unit_id", "time_us", name=op.f("uq_cycles_unit_id_time_us")),
        comment="readings as used, stored before the cycle runs",
    )
    op.create_table(
        "results",
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("cycle", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("estimate", sa.LargeBinary(), nullable=False),
        sa.Column("sd", sa.LargeBinary(), nullable=False),
        sa.Column("status", sa.LargeBinary(), nullable=False),
        sa.Column("predicted", sa.LargeBinary(), nullable=False),
        sa.Column("innovation", sa.LargeBinary(), nullable=False),
        sa.Column("innovation_sd", sa.LargeBinary(), nullable=False),
        sa.Column("used", sa.LargeBinary(), nullable=False),
        sa.Column("sums", sa.LargeBinary(), nullable=False),
        sa.Column("reasons", sa.Text(), nullable=False),
        sa.Column("digest", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(
            ["unit_id", "cycle"], ["cycles.unit_id", "cycles.cycle"], name=op.f("fk_results_cycles")
        ),
        sa.PrimaryKeyConstraint("unit_id", "cycle", name=op.f("pk_results")),
        comment="results as published",
    )
    op.create_table(
        "checkpoints",
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("cycle", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("format_version", sa.Integer(), nullable=False),
        sa.Column("state", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_checkpoints_units")),
        sa.PrimaryKeyConstraint("unit_id", "cycle", name=op.f("pk_checkpoints")),
    )
    op.create_table(
        "revised_estimates",
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("cycle", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("revised_at_cycle", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("estimate", sa.LargeBinary(), nullable=False),
        sa.Column("sd", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(
            ["unit_id", "cycle"], ["cycles.unit_id", "cycles.cycle"], name=op.f("fk_revised_estimates_cycles")
        ),
        sa.PrimaryKeyConstraint("unit_id", "cycle", "revised_at_cycle", name=op.f("pk_revised_estimates")),
        comment="what a late laboratory result makes of a cycle, beside what was published",
    )
    op.create_table(
        "rollups",
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("tag", sa.Text(), nullable=False),
        sa.Column("quantity", sa.Text(), nullable=False),
        sa.Column("width_us", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("start_us", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("minimum", sa.Double(), nullable=False),
        sa.Column("mean", sa.Double(), nullable=False),
        sa.Column("maximum", sa.Double(), nullable=False),
        sa.Column("count", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_rollups_units")),
        sa.PrimaryKeyConstraint(
            "unit_id", "tag", "quantity", "width_us", "start_us", name=op.f("pk_rollups")
        ),
    )


def make_happenings() -> None:
    """Flags, laboratory results, and what else happened."""
    op.create_table(
        "flags",
        sa.Column("id", sa.Text(), nullable=False),
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("tag", sa.Text(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("onset_us", sa.BigInteger(), nullable=False),
        sa.Column("detected_us", sa.BigInteger(), nullable=False),
        sa.Column("cleared_us", sa.BigInteger(), nullable=True),
        sa.Column("size", sa.Double(), nullable=True),
        sa.Column("size_sd", sa.Double(), nullable=True),
        sa.Column("probability", sa.Double(), nullable=True),
        sa.Column("group", sa.Text(), nullable=False),
        sa.Column("state", sa.Text(), nullable=False),
        sa.Column("acknowledged_us", sa.BigInteger(), nullable=True),
        sa.Column("acknowledged_by", sa.Text(), nullable=True),
        sa.Column("finding", sa.Text(), nullable=True),
        sa.Column("finding_us", sa.BigInteger(), nullable=True),
        sa.Column("finding_by", sa.Text(), nullable=True),
        sa.Column("as_found", sa.Double(), nullable=True),
        sa.Column("as_left", sa.Double(), nullable=True),
        sa.CheckConstraint(
            "finding IN ('confirmed', 'not confirmed', 'process change', 'undecided')",
            name=op.f("ck_flags_finding"),
        ),
        sa.CheckConstraint("state IN ('open', 'cleared')", name=op.f("ck_flags_state")),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_flags_units")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_flags")),
    )
    op.create_index(op.f("ix_flags_unit_id_detected_us"), "flags", ["unit_id", "detected_us"], unique=False)
    op.create_table(
        "flag_comments",
        sa.Column("id", IDENTITY, autoincrement=True, nullable=False),
        sa.Column("flag_id", sa.Text(), nullable=False),
        sa.Column("time_us", sa.BigInteger(), nullable=False),
        sa.Column("actor", sa.Text(), nullable=False),
        sa.Column("text", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["flag_id"], ["flags.id"], name=op.f("fk_flag_comments_flags")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_flag_comments")),
    )
    op.create_index(op.f("ix_flag_comments_flag_id"), "flag_comments", ["flag_id"], unique=False)
    op.create_table(
        "events",
        sa.Column("id", IDENTITY, autoincrement=True, nullable=False),
        sa.Column("unit_id", sa.BigInteger(), nullable=True),
        sa.Column("time_us", sa.BigInteger(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("tag", sa.Text(), nullable=True),
        sa.Column("text", sa.Text(), nullable=False),
        sa.Column("key", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_events_units")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_events")),
        sa.UniqueConstraint("key", name=op.f("uq_events_key")),
        comment="what happened; the key keeps a repeated write from counting twice",
    )
    op.create_index(op.f("ix_events_unit_id_time_us"), "events", ["unit_id", "time_us"], unique=False)
    op.create_table(
        "lab_results",
        sa.Column("id", IDENTITY, autoincrement=True, nullable=False),
        sa.Column("unit_id", sa.BigInteger(), nullable=False),
        sa.Column("tag", sa.Text(), nullable=False),
        sa.Column("sampled_us", sa.BigInteger(), nullable=False),
        sa.Column("reported_us", sa.BigInteger(), nullable=False),
        sa.Column("value", sa.Double(), nullable=False),
        sa.Column("time_uncertainty", sa.Double(), nullable=False),
        sa.Column("arrived_cycle", sa.BigInteger(), nullable=True),
        sa.Column("counted_cycle", sa.BigInteger(), nullable=True),
        sa.Column("predicted", sa.Double(), nullable=True),
        sa.Column("innovation", sa.Double(), nullable=True),
        sa.Column("sd", sa.Double(), nullable=True),
        sa.Column("status", sa.Text(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("revises", sa.BigInteger(), nullable=True),
        sa.Column("decided_us", sa.BigInteger(), nullable=True),
        sa.Column("decided_by", sa.Text(), nullable=True),
        sa.CheckConstraint(
            "status IN ('used', 'left out', 'waiting for a person')", name=op.f("ck_lab_results_status")
        ),
        sa.ForeignKeyConstraint(["revises"], ["lab_results.id"], name=op.f("fk_lab_results_lab_results")),
        sa.ForeignKeyConstraint(["unit_id"], ["units.id"], name=op.f("fk_lab_results_units")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_lab_results")),
        sa.UniqueConstraint(
            "unit_id",
            "tag",
            "sampled_us",
            "reported_us",
            "value",
            name=op.f("uq_lab_results_unit_id_tag_sampled_us_reported_us_value"),
        ),
    )


def make_trail() -> None:
    """The audit trail and its head."""
    op.create_table(
        "audit_trail",
        sa.Column("sequence", sa.BigInteger(), autoincrement=False, nullable=False),
        sa.Column("time_us", sa.BigInteger(), nullable=False),
        sa.Column("actor", sa.Text(), nullable=False),
        sa.Column("action", sa.Text(), nullable=False),
        sa.Column("object", sa.Text(), nullable=False),
        sa.Column("before", sa.Text(), nullable=True),
        sa.Column("after", sa.Text(), nullable=True),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("previous_hash", sa.String(length=64), nullable=False),
        sa.Column("hash", sa.String(length=64), nullable=False),
        sa.PrimaryKeyConstraint("sequence", name=op.f("pk_audit_trail")),
        sa.UniqueConstraint("hash", name=op.f("uq_audit_trail_hash")),
        sa.UniqueConstraint("previous_hash", name=op.f("uq_audit_trail_previous_hash")),
        comment="append-only by triggers; each entry's hash covers the entry before",
    )
    op.create_table(
        "schema_info",
        sa.Column("id", sa.Integer(), autoincrement=False, nullable=False),
        sa.Column("audit_entries", sa.BigInteger(), nullable=False),
        sa.Column("audit_head", sa.String(length=64), nullable=False),
        sa.CheckConstraint("id = 1", name=op.f("ck_schema_info_single_row")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_schema_info")),
        comment="one row: how many audit entries there are, and the newest one's hash",
    )
    op.execute(f"INSERT INTO schema_info (id, audit_entries, audit_head) VALUES (1, 0, '{NO_HASH}')")


def guard_trail() -> None:
    """Refuse every change of an entry that is there, by whomever."""
    if op.get_bind().dialect.name == "sqlite":
        for event in ("update", "delete"):
            op.execute(SQLITE_GUARD.format(event=event))
        op.execute(SQLITE_NO_REPLACE)
        return
    op.execute(POSTGRESQL_REFUSAL)
    for event in ("update", "delete", "truncate"):
        op.execute(POSTGRESQL_GUARD.format(event=event))
