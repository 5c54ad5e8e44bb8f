"""Every table of the store, once.

Shape: a shot points to an immutable, content-addressed *value set* of the settings that rest; what moves is a row of
the shot (`shot_value`). Set rows and shot rows of one shot are disjoint, so its settings are their plain union.
Times are microseconds since 1970 in UTC. See docs/data-model.md.
"""

from __future__ import annotations

from sqlalchemy import (
    BigInteger,
    Boolean,
    CheckConstraint,
    Column,
    Double,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    Table,
    Text,
    UniqueConstraint,
    text,
)

REVISION = "0002"

metadata = MetaData(
    naming_convention={
        "ix": "ix_%(table_name)s_%(column_0_N_name)s",
        "uq": "uq_%(table_name)s_%(column_0_N_name)s",
        "ck": "ck_%(table_name)s_%(constraint_name)s",
        "fk": "fk_%(table_name)s_%(column_0_N_name)s",
        "pk": "pk_%(table_name)s",
    }
)

# A BigInteger primary key does not count up by itself on SQLite; INTEGER does, and holds 64 bits there.
BigId = BigInteger().with_variant(Integer, "sqlite")


def _id() -> Column[int]:
    return Column("id", BigId, primary_key=True)


def _to(name: str, target: str, *, nullable: bool = False, primary_key: bool = False) -> Column[int]:
    kind = BigId if target in ("shot", "value_set", "fit") else Integer
    return Column(
        name, kind, ForeignKey(f"{target}.id"), nullable=nullable and not primary_key, primary_key=primary_key
    )


turn = Table(
    "turn",
    metadata,
    Column("id", Integer, primary_key=True),
    Column("taken", BigInteger, nullable=False),
)

machine = Table(
    "machine",
    metadata,
    Column("id", Integer, primary_key=True),
    Column("name", Text, nullable=False, unique=True),
    Column("zone", Text, nullable=False),
)

machine_alias = Table(
    "machine_alias",
    metadata,
    Column("name", Text, primary_key=True),
    _to("machine_id", "machine"),
    Column("by", Text),
    Column("reason", Text, nullable=False),
    Column("at_us", BigInteger, nullable=False),
)

card = Table(
    "card",
    metadata,
    Column("id", Integer, primary_key=True),
    _to("machine_id", "machine"),
    Column("digest", Text, nullable=False),
    Column("toml", Text, nullable=False),
    Column("at_us", BigInteger, nullable=False),
)

parameter = Table(
    "parameter",
    metadata,
    Column("id", Integer, primary_key=True),
    _to("machine_id", "machine"),
    Column("name", Text, nullable=False),
    Column("kind", Text, nullable=False),
    Column("unit", Text),
    UniqueConstraint("machine_id", "name"),
    CheckConstraint("kind IN ('number', 'text', 'truth')", name="kind"),
)

observable = Table(
    "observable",
    metadata,
    Column("id", Integer, primary_key=True),
    _to("machine_id", "machine"),
    Column("name", Text, nullable=False),
    Column("unit", Text),
    UniqueConstraint("machine_id", "name"),
)

sequence = Table(
    "sequence",
    metadata,
    Column("id", Integer, primary_key=True),
    _to("machine_id", "machine"),
    Column("name", Text, nullable=False),
    UniqueConstraint("machine_id", "name"),
)

version = Table(
    "version",
    metadata,
    Column("id", Integer, primary_key=True),
    _to("sequence_id", "sequence"),
    Column("digest", LargeBinary, nullable=False),
    Column("structure", Text, nullable=False),
    UniqueConstraint("sequence_id", "digest"),
)

value_set = Table(
    "value_set",
    metadata,
    _id(),
    Column("digest", LargeBinary, nullable=False, unique=True),
    Column("n", Integer, nullable=False),
)

set_value = Table(
    "set_value",
    metadata,
    _to("set_id", "value_set", primary_key=True),
    _to("parameter_id", "parameter", primary_key=True),
    Column("num", Double),
    Column("exact", Text),
    Index(None, "parameter_id", "num", "set_id"),
    sqlite_with_rowid=False,
)

source = Table(
    "source",
    metadata,
    Column("id", Integer, primary_key=True),
    Column("path", Text, nullable=False, unique=True),
    Column("fingerprint", Text, nullable=False),
    Column("position", BigInteger, nullable=False),
)

refusal = Table(
    "refusal",
    metadata,
    _id(),
    _to("source_id", "source"),
    Column("byte", BigInteger, nullable=False),
    Column("line", Integer, nullable=False),
    Column("reason", Text, nullable=False),
    Column("at_us", BigInteger, nullable=False),
    UniqueConstraint("source_id", "byte"),
)

scan = Table(
    "scan",
    metadata,
    Column("id", Integer, primary_key=True),
    _to("sequence_id", "sequence"),
    Column("label", Text),
    Column("round", Integer, nullable=False),
    Column("origin", Text, nullable=False),
    Column("planned_shots", Integer),
    Column("closed_us", BigInteger),
    UniqueConstraint("sequence_id", "label", "round"),
    CheckConstraint("origin IN ('label', 'declared', 'found')", name="origin"),
)

scan_axis = Table(
    "scan_axis",
    metadata,
    _to("scan_id", "scan", primary_key=True),
    _to("parameter_id", "parameter", primary_key=True),
    Column("position", Integer, nullable=False),
    _to("follows_id", "parameter", nullable=True),
)

shot = Table(
    "shot",
    metadata,
    _id(),
    Column("uid", Text, nullable=False, unique=True),
    Column("started_us", BigInteger, nullable=False),
    _to("sequence_id", "sequence"),
    _to("version_id", "version", nullable=True),
    _to("scan_id", "scan", nullable=True),
    Column("reference", Boolean(create_constraint=False), nullable=False),
    Column("planned_shots", Integer),
    Column("last", Boolean(create_constraint=False), nullable=False),
    _to("set_id", "value_set"),
    Column("values_digest", LargeBinary, nullable=False),
    Column("content_digest", LargeBinary, nullable=False),
    _to("source_id", "source", nullable=True),
    Column("line", Integer),
    Index(None, "started_us"),
    Index(None, "sequence_id", "started_us"),
    Index(None, "scan_id", "id"),
    Index(None, "set_id", "id"),
)
Index(
    "ix_shot_reference",
    shot.c.started_us,
    sqlite_where=text("reference = 1"),
    postgresql_where=text("reference"),
)

shot_value = Table(
    "shot_value",
    metadata,
    _to("shot_id", "shot", primary_key=True),
    _to("parameter_id", "parameter", primary_key=True),
    Column("num", Double),
    Column("exact", Text),
    Column("swept", Boolean(create_constraint=False), nullable=False),
    Index(None, "parameter_id", "num", "shot_id"),
    sqlite_with_rowid=False,
)

swept_derived = Table(
    "swept_derived",
    metadata,
    _to("shot_id", "shot", primary_key=True),
    _to("parameter_id", "parameter", primary_key=True),
    sqlite_with_rowid=False,
)

correction = Table(
    "correction",
    metadata,
    _id(),
    _to("shot_id", "shot"),
    _to("parameter_id", "parameter"),
    Column("old_num", Double),
    Column("old_exact", Text),
    Column("new_num", Double),
    Column("new_exact", Text),
    Column("old_digest", LargeBinary, nullable=False),
    Column("reason", Text, nullable=False),
    Column("by", Text),
    Column("at_us", BigInteger, nullable=False),
    Index(None, "shot_id"),
)

arrangement = Table(
    "arrangement",
    metadata,
    Column("id", Integer, primary_key=True),
    Column("kind", Text, nullable=False),
    Column("reason", Text),
    Column("by", Text),
    Column("at_us", BigInteger, nullable=False),
    Column("undone_us", BigInteger),
    Column("undone_by", Text),
    CheckConstraint("kind IN ('join', 'split')", name="kind"),
)

arranged = Table(
    "arranged",
    metadata,
    _to("arrangement_id", "arrangement", primary_key=True),
    _to("shot_id", "shot", primary_key=True),
    Column("from_scan", Integer, nullable=False),
    Column("to_scan", Integer, nullable=False),
    Index(None, "shot_id"),
    sqlite_with_rowid=False,
)

derivation = Table(
    "derivation",
    metadata,
    Column("id", Integer, primary_key=True),
    Column("name", Text, nullable=False),
    Column("version", Text, nullable=False),
    Column("settings", Text, nullable=False),
    UniqueConstraint("name", "version", "settings"),
)

reading = Table(
    "reading",
    metadata,
    _to("shot_id", "shot", primary_key=True),
    _to("observable_id", "observable", primary_key=True),
    Column("value", Double),
    Column("stderr", Double),
    Column("state", Text),
    _to("derivation_id", "derivation", nullable=True),
    sqlite_with_rowid=False,
)

past_reading = Table(
    "past_reading",
    metadata,
    _id(),
    _to("shot_id", "shot"),
    _to("observable_id", "observable"),
    Column("value", Double),
    Column("stderr", Double),
    Column("state", Text),
    _to("derivation_id", "derivation", nullable=True),
    Column("until_us", BigInteger, nullable=False),
    Index(None, "shot_id"),
)

amendment = Table(
    "amendment",
    metadata,
    _to("shot_id", "shot", primary_key=True),
    Column("digest", LargeBinary, primary_key=True),
    Column("at_us", BigInteger, nullable=False),
)

frame = Table(
    "frame",
    metadata,
    _to("shot_id", "shot", primary_key=True),
    Column("camera", Text, primary_key=True),
    Column("role", Text, primary_key=True),
    Column("path", Text, nullable=False),
    Column("sha256", Text),
)

note = Table(
    "note",
    metadata,
    _id(),
    Column("subject", Text, nullable=False, index=True),
    Column("text", Text, nullable=False),
    Column("by", Text),
    Column("at_us", BigInteger, nullable=False),
)

set_aside = Table(
    "set_aside",
    metadata,
    _id(),
    _to("shot_id", "shot"),
    Column("reason", Text, nullable=False),
    Column("by", Text),
    Column("rule", Text),
    Column("at_us", BigInteger, nullable=False),
    Column("lifted_us", BigInteger),
    Column("lifted_by", Text),
    Index(None, "shot_id"),
)

fit = Table(
    "fit",
    metadata,
    _id(),
    _to("scan_id", "scan"),
    _to("observable_id", "observable"),
    Column("along", Text, nullable=False),
    Column("slice", Text, nullable=False),
    Column("model", Text, nullable=False),
    Column("background", Text, nullable=False),
    Column("settings", Text, nullable=False),
    Column("data_digest", LargeBinary, nullable=False),
    Column("covariance", Text, nullable=False),
    Column("trusted", Boolean(create_constraint=False), nullable=False),
    Column("dof", Integer, nullable=False),
    Column("residual_stderr", Double),
    Column("program", Text, nullable=False),
    Column("at_us", BigInteger, nullable=False),
    Column("replaces", BigId, ForeignKey("fit.id"), nullable=True),
    Index(None, "scan_id"),
)

fit_shot = Table(
    "fit_shot",
    metadata,
    _to("fit_id", "fit", primary_key=True),
    _to("shot_id", "shot", primary_key=True),
    Column("role", Text, nullable=False),
    Index(None, "shot_id"),
    CheckConstraint("role IN ('used', 'set aside', 'outlier', 'no value')", name="role"),
    sqlite_with_rowid=False,
)

estimate = Table(
    "estimate",
    metadata,
    _to("fit_id", "fit", primary_key=True),
    Column("name", Text, primary_key=True),
    Column("position", Integer, nullable=False),
    Column("value", Double),
    Column("stderr", Double),
    Column("low68", Double),
    Column("high68", Double),
    Column("low95", Double),
    Column("high95", Double),
    Column("unit", Text, nullable=False),
    Column("fixed", Boolean(create_constraint=False), nullable=False),
)

fit_warning = Table(
    "fit_warning",
    metadata,
    _to("fit_id", "fit", primary_key=True),
    Column("code", Text, primary_key=True),
    Column("message", Text, nullable=False),
    Column("advisory", Boolean(create_constraint=False), nullable=False),
)

sensor = Table(
    "sensor",
    metadata,
    Column("id", Integer, primary_key=True),
    _to("machine_id", "machine"),
    Column("name", Text, nullable=False),
    Column("unit", Text),
    UniqueConstraint("machine_id", "name"),
)

sensor_hour = Table(
    "sensor_hour",
    metadata,
    _to("sensor_id", "sensor", primary_key=True),
    Column("hour", Integer, primary_key=True),
    Column("n", Integer, nullable=False),
    Column("first_us", BigInteger, nullable=False),
    Column("last_us", BigInteger, nullable=False),
    Column("readings", LargeBinary, nullable=False),
)
