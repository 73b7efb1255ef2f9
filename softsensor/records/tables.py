"""The tables of the records, the same on SQLite and PostgreSQL.

Times are integer UTC microseconds since 1970, durations that name a bucket likewise. Vectors are bytes
(``softsensor.records.vectors``), because SQLite's REAL turns nan into NULL and -0.0 into 0.0. Engineering
values that stand alone (a flag's size, a laboratory value) are doubles in the unit of their tag.

``migrations/`` makes these tables; a test holds the two against each other.
"""

from __future__ import annotations

from sqlalchemy import (
    BigInteger,
    Boolean,
    CheckConstraint,
    Column,
    Double,
    ForeignKey,
    ForeignKeyConstraint,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    String,
    Table,
    Text,
    UniqueConstraint,
)

NAMING = {
    "ix": "ix_%(table_name)s_%(column_0_N_name)s",
    "uq": "uq_%(table_name)s_%(column_0_N_name)s",
    "ck": "ck_%(table_name)s_%(constraint_name)s",
    "fk": "fk_%(table_name)s_%(referred_table_name)s",
    "pk": "pk_%(table_name)s",
}

metadata = MetaData(naming_convention=NAMING)

Identity = BigInteger().with_variant(Integer, "sqlite")
"""A key that counts itself up: SQLite does so for INTEGER only."""

REVISION_STATES = ("draft", "in parallel run", "in service", "withdrawn")
LAB_STATES = ("used", "left out", "waiting for a person")
FINDINGS = ("confirmed", "not confirmed", "process change", "undecided")
FLAG_STATES = ("open", "cleared")
ACTS = ("put back", "leave out", "rest", "go on")


def one_of(column: str, words: tuple[str, ...]) -> CheckConstraint:
    """A column that takes only these words."""
    listed = ", ".join(f"'{word}'" for word in words)
    return CheckConstraint(f"{column} IN ({listed})", name=column)


units = Table(
    "units",
    metadata,
    Column("id", Identity, primary_key=True, autoincrement=True),
    Column("name", Text, nullable=False, unique=True),
    Column("title", Text, nullable=False),
    Column("created_us", BigInteger, nullable=False),
)

model_revisions = Table(
    "model_revisions",
    metadata,
    Column("id", Identity, primary_key=True, autoincrement=True),
    Column("unit_id", BigInteger, ForeignKey("units.id"), nullable=False),
    Column("digest", String(64), nullable=False),
    Column("file_text", Text, nullable=False),
    Column("arrays", LargeBinary, nullable=False),
    Column("created_us", BigInteger, nullable=False),
    Column("state", Text, nullable=False),
    Column("actor", Text, nullable=False),
    one_of("state", REVISION_STATES),
    Index(None, "unit_id", "digest"),
)

cycles = Table(
    "cycles",
    metadata,
    Column("unit_id", BigInteger, ForeignKey("units.id"), primary_key=True),
    Column("cycle", BigInteger, primary_key=True, autoincrement=False),
    Column("revision_id", BigInteger, ForeignKey("model_revisions.id"), nullable=False),
    Column("time_us", BigInteger, nullable=False),
    Column("u", LargeBinary, nullable=False),
    Column("u_quality", LargeBinary, nullable=False),
    Column("y", LargeBinary, nullable=False),
    Column("y_quality", LargeBinary, nullable=False),
    Column("decisions", LargeBinary, nullable=False),
    UniqueConstraint("unit_id", "time_us"),
    comment="readings as used, stored before the cycle runs",
)

results = Table(
    "results",
    metadata,
    Column("unit_id", BigInteger, primary_key=True),
    Column("cycle", BigInteger, primary_key=True, autoincrement=False),
    Column("estimate", LargeBinary, nullable=False),
    Column("sd", LargeBinary, nullable=False),
    Column("status", LargeBinary, nullable=False),
    Column("predicted", LargeBinary, nullable=False),
    Column("innovation", LargeBinary, nullable=False),
    Column("innovation_sd", LargeBinary, nullable=False),
    Column("used", LargeBinary, nullable=False),
    Column("sums", LargeBinary, nullable=False),
    Column("reasons", Text, nullable=False),
    Column("digest", LargeBinary, nullable=False),
    ForeignKeyConstraint(["unit_id", "cycle"], ["cycles.unit_id", "cycles.cycle"]),
    comment="results as published",
)

checkpoints = Table(
    "checkpoints",
    metadata,
    Column("unit_id", BigInteger, ForeignKey("units.id"), primary_key=True),
    Column("cycle", BigInteger, primary_key=True, autoincrement=False),
    Column("format_version", Integer, nullable=False),
    Column("state", LargeBinary, nullable=False),
)

revised_estimates = Table(
    "revised_estimates",
    metadata,
    Column("unit_id", BigInteger, primary_key=True),
    Column("cycle", BigInteger, primary_key=True, autoincrement=False),
    Column("revised_at_cycle", BigInteger, primary_key=True, autoincrement=False),
    Column("estimate", LargeBinary, nullable=False),
    Column("sd", LargeBinary, nullable=False),
    ForeignKeyConstraint(["unit_id", "cycle"], ["cycles.unit_id", "cycles.cycle"]),
    comment="what a late laboratory result makes of a cycle, beside what was published",
)

rollups = Table(
    "rollups",
    metadata,
    Column("unit_id", BigInteger, ForeignKey("units.id"), primary_key=True),
    Column("tag", Text, primary_key=True),
    Column("quantity", Text, primary_key=True),
    Column("width_us", BigInteger, primary_key=True, autoincrement=False),
    Column("start_us", BigInteger, primary_key=True, autoincrement=False),
    Column("minimum", Double, nullable=False),
    Column("mean", Double, nullable=False),
    Column("maximum", Double, nullable=False),
    Column("count", BigInteger, nullable=False),
)

flags = Table(
    "flags",
    metadata,
    Column("id", Text, primary_key=True),
    Column("unit_id", BigInteger, ForeignKey("units.id"), nullable=False),
    Column("tag", Text, nullable=False),
    Column("kind", Text, nullable=False),
    Column("onset_us", BigInteger, nullable=False),
    Column("detected_us", BigInteger, nullable=False),
    Column("cleared_us", BigInteger),
    Column("size", Double),
    Column("size_sd", Double),
    Column("probability", Double),
    Column("group", Text, nullable=False),
    Column("state", Text, nullable=False),
    Column("acknowledged_us", BigInteger),
    Column("acknowledged_by", Text),
    Column("finding", Text),
    Column("finding_us", BigInteger),
    Column("finding_by", Text),
    Column("as_found", Double),
    Column("as_left", Double),
    Column("onset_from_us", BigInteger),
    Column("onset_to_us", BigInteger),
    Column("hypotheses", Text),
    one_of("state", FLAG_STATES),
    one_of("finding", FINDINGS),
    Index(None, "unit_id", "detected_us"),
)

flag_comments = Table(
    "flag_comments",
    metadata,
    Column("id", Identity, primary_key=True, autoincrement=True),
    Column("flag_id", Text, ForeignKey("flags.id"), nullable=False, index=True),
    Column("time_us", BigInteger, nullable=False),
    Column("actor", Text, nullable=False),
    Column("text", Text, nullable=False),
)

events = Table(
    "events",
    metadata,
    Column("id", Identity, primary_key=True, autoincrement=True),
    Column("unit_id", BigInteger, ForeignKey("units.id")),
    Column("time_us", BigInteger, nullable=False),
    Column("kind", Text, nullable=False),
    Column("tag", Text),
    Column("text", Text, nullable=False),
    Column("key", Text, nullable=False, unique=True),
    Index(None, "unit_id", "time_us"),
    comment="what happened; the key keeps a repeated write from counting twice",
)

lab_results = Table(
    "lab_results",
    metadata,
    Column("id", Identity, primary_key=True, autoincrement=True),
    Column("unit_id", BigInteger, ForeignKey("units.id"), nullable=False),
    Column("tag", Text, nullable=False),
    Column("sampled_us", BigInteger, nullable=False),
    Column("reported_us", BigInteger, nullable=False),
    Column("value", Double, nullable=False),
    Column("time_uncertainty", Double, nullable=False),
    Column("arrived_cycle", BigInteger),
    Column("counted_cycle", BigInteger),
    Column("predicted", Double),
    Column("innovation", Double),
    Column("sd", Double),
    Column("status", Text, nullable=False),
    Column("reason", Text, nullable=False),
    Column("revises", BigInteger, ForeignKey("lab_results.id")),
    Column("decided_us", BigInteger),
    Column("decided_by", Text),
    one_of("status", LAB_STATES),
    UniqueConstraint("unit_id", "tag", "sampled_us", "reported_us", "value"),
)

decisions = Table(
    "decisions",
    metadata,
    Column("id", Identity, primary_key=True, autoincrement=True),
    Column("unit_id", BigInteger, ForeignKey("units.id"), nullable=False),
    Column("act", Text, nullable=False),
    Column("tag", Text),
    Column("flag_id", Text, ForeignKey("flags.id"), index=True),
    Column("occasion", Text),
    Column("seconds", Double),
    Column("actor", Text, nullable=False),
    Column("reason", Text, nullable=False),
    Column("decided_us", BigInteger, nullable=False),
    Column("taken_cycle", BigInteger),
    Column("taken_us", BigInteger),
    Column("until_us", BigInteger),
    Column("refusal", Text),
    one_of("act", ACTS),
    Index(None, "unit_id", "taken_us"),
    comment="what people decided; the last four columns are empty until a cycle has taken it",
)

left_out = Table(
    "left_out",
    metadata,
    Column("unit_id", BigInteger, ForeignKey("units.id"), primary_key=True),
    Column("tag", Text, primary_key=True),
    Column("since_us", BigInteger, primary_key=True, autoincrement=False),
    Column("by_person", Boolean, primary_key=True),
    Column("until_us", BigInteger),
    comment="when each sensor was kept from the estimate",
)

rests = Table(
    "rests",
    metadata,
    Column("unit_id", BigInteger, ForeignKey("units.id"), primary_key=True),
    Column("cause", Text, primary_key=True),
    Column("tag", Text, primary_key=True),
    Column("since_us", BigInteger, primary_key=True, autoincrement=False),
    Column("until_us", BigInteger),
    Column("why", Text, nullable=False),
    comment="when tests of innovations rested and why; an empty tag means all sensors",
)

claims = Table(
    "claims",
    metadata,
    Column("unit_id", BigInteger, ForeignKey("units.id"), primary_key=True, autoincrement=False),
    Column("holder", Text, nullable=False),
    Column("host", Text, nullable=False),
    Column("process", BigInteger, nullable=False),
    Column("since_us", BigInteger, nullable=False),
    comment="which service serves a unit; whether it is alive tells a lock that ends with its process",
)

audit_trail = Table(
    "audit_trail",
    metadata,
    Column("sequence", BigInteger, primary_key=True, autoincrement=False),
    Column("time_us", BigInteger, nullable=False),
    Column("actor", Text, nullable=False),
    Column("action", Text, nullable=False),
    Column("object", Text, nullable=False),
    Column("before", Text),
    Column("after", Text),
    Column("reason", Text, nullable=False),
    Column("previous_hash", String(64), nullable=False, unique=True),
    Column("hash", String(64), nullable=False, unique=True),
    comment="append-only by triggers; each entry's hash covers the entry before",
)

schema_info = Table(
    "schema_info",
    metadata,
    Column("id", Integer, primary_key=True, autoincrement=False),
    Column("audit_entries", BigInteger, nullable=False),
    Column("audit_head", String(64), nullable=False),
    CheckConstraint("id = 1", name="single_row"),
    comment="one row: how many audit entries there are, and the newest one's hash",
)
