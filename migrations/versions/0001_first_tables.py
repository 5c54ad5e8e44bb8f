"""The first tables: machines, settings, shots, readings, scans, fits.

Why: the store begins here.
What happens to old rows: there are none.
"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None


def upgrade() -> None:
    op.create_table(
        "derivation",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("version", sa.Text(), nullable=False),
        sa.Column("settings", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_derivation")),
        sa.UniqueConstraint("name", "version", "settings", name=op.f("uq_derivation_name_version_settings")),
    )
    op.create_table(
        "machine",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("zone", sa.Text(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_machine")),
        sa.UniqueConstraint("name", name=op.f("uq_machine_name")),
    )
    op.create_table(
        "note",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("subject", sa.Text(), nullable=False),
        sa.Column("text", sa.Text(), nullable=False),
        sa.Column("by", sa.Text(), nullable=True),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_note")),
    )
    op.create_index(op.f("ix_note_subject"), "note", ["subject"], unique=False)

    op.create_table(
        "source",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("path", sa.Text(), nullable=False),
        sa.Column("fingerprint", sa.Text(), nullable=False),
        sa.Column("position", sa.BigInteger(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_source")),
        sa.UniqueConstraint("path", name=op.f("uq_source_path")),
    )
    op.create_table(
        "turn",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("taken", sa.BigInteger(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_turn")),
    )
    op.create_table(
        "value_set",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("digest", sa.LargeBinary(), nullable=False),
        sa.Column("n", sa.Integer(), nullable=False),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_value_set")),
        sa.UniqueConstraint("digest", name=op.f("uq_value_set_digest")),
    )
    op.create_table(
        "card",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("machine_id", sa.Integer(), nullable=False),
        sa.Column("digest", sa.Text(), nullable=False),
        sa.Column("toml", sa.Text(), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["machine_id"], ["machine.id"], name=op.f("fk_card_machine_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_card")),
        sa.UniqueConstraint("machine_id", "digest", name=op.f("uq_card_machine_id_digest")),
    )
    op.create_table(
        "observable",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("machine_id", sa.Integer(), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("unit", sa.Text(), nullable=True),
        sa.ForeignKeyConstraint(["machine_id"], ["machine.id"], name=op.f("fk_observable_machine_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_observable")),
        sa.UniqueConstraint("machine_id", "name", name=op.f("uq_observable_machine_id_name")),
    )
    op.create_table(
        "parameter",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("machine_id", sa.Integer(), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("unit", sa.Text(), nullable=True),
        sa.CheckConstraint("kind IN ('number', 'text', 'truth')", name=op.f("ck_parameter_kind")),
        sa.ForeignKeyConstraint(["machine_id"], ["machine.id"], name=op.f("fk_parameter_machine_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_parameter")),
        sa.UniqueConstraint("machine_id", "name", name=op.f("uq_parameter_machine_id_name")),
    )
    op.create_table(
        "refusal",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("source_id", sa.Integer(), nullable=False),
        sa.Column("byte", sa.BigInteger(), nullable=False),
        sa.Column("line", sa.Integer(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["source_id"], ["source.id"], name=op.f("fk_refusal_source_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_refusal")),
        sa.UniqueConstraint("source_id", "byte", name=op.f("uq_refusal_source_id_byte")),
    )
    op.create_table(
        "sequence",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("machine_id", sa.Integer(), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["machine_id"], ["machine.id"], name=op.f("fk_sequence_machine_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_sequence")),
        sa.UniqueConstraint("machine_id", "name", name=op.f("uq_sequence_machine_id_name")),
    )
    op.create_table(
        "scan",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("sequence_id", sa.Integer(), nullable=False),
        sa.Column("label", sa.Text(), nullable=True),
        sa.Column("round", sa.Integer(), nullable=False),
        sa.Column("origin", sa.Text(), nullable=False),
        sa.Column("planned_shots", sa.Integer(), nullable=True),
        sa.Column("closed_us", sa.BigInteger(), nullable=True),
        sa.CheckConstraint("origin IN ('label', 'declared', 'found')", name=op.f("ck_scan_origin")),
        sa.ForeignKeyConstraint(["sequence_id"], ["sequence.id"], name=op.f("fk_scan_sequence_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_scan")),
        sa.UniqueConstraint("sequence_id", "label", "round", name=op.f("uq_scan_sequence_id_label_round")),
    )
    op.create_table(
        "set_value",
        sa.Column("set_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("parameter_id", sa.Integer(), nullable=False),
        sa.Column("num", sa.Double(), nullable=True),
        sa.Column("exact", sa.Text(), nullable=True),
        sa.ForeignKeyConstraint(["parameter_id"], ["parameter.id"], name=op.f("fk_set_value_parameter_id")),
        sa.ForeignKeyConstraint(["set_id"], ["value_set.id"], name=op.f("fk_set_value_set_id")),
        sa.PrimaryKeyConstraint("set_id", "parameter_id", name=op.f("pk_set_value")),
        sqlite_with_rowid=False,
    )
    op.create_index(
        op.f("ix_set_value_parameter_id_num_set_id"),
        "set_value",
        ["parameter_id", "num", "set_id"],
        unique=False,
    )

    op.create_table(
        "version",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("sequence_id", sa.Integer(), nullable=False),
        sa.Column("digest", sa.LargeBinary(), nullable=False),
        sa.Column("structure", sa.Text(), nullable=False),
        sa.ForeignKeyConstraint(["sequence_id"], ["sequence.id"], name=op.f("fk_version_sequence_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_version")),
        sa.UniqueConstraint("sequence_id", "digest", name=op.f("uq_version_sequence_id_digest")),
    )
    op.create_table(
        "fit",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("scan_id", sa.Integer(), nullable=False),
        sa.Column("observable_id", sa.Integer(), nullable=False),
        sa.Column("along", sa.Text(), nullable=False),
        sa.Column("slice", sa.Text(), nullable=False),
        sa.Column("model", sa.Text(), nullable=False),
        sa.Column("background", sa.Text(), nullable=False),
        sa.Column("settings", sa.Text(), nullable=False),
        sa.Column("data_digest", sa.LargeBinary(), nullable=False),
        sa.Column("covariance", sa.Text(), nullable=False),
        sa.Column("trusted", sa.Boolean(), nullable=False),
        sa.Column("dof", sa.Integer(), nullable=False),
        sa.Column("residual_stderr", sa.Double(), nullable=True),
        sa.Column("program", sa.Text(), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.Column("replaces", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=True),
        sa.ForeignKeyConstraint(["observable_id"], ["observable.id"], name=op.f("fk_fit_observable_id")),
        sa.ForeignKeyConstraint(["replaces"], ["fit.id"], name=op.f("fk_fit_replaces")),
        sa.ForeignKeyConstraint(["scan_id"], ["scan.id"], name=op.f("fk_fit_scan_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_fit")),
    )
    op.create_index(op.f("ix_fit_scan_id"), "fit", ["scan_id"], unique=False)

    op.create_table(
        "scan_axis",
        sa.Column("scan_id", sa.Integer(), nullable=False),
        sa.Column("parameter_id", sa.Integer(), nullable=False),
        sa.Column("position", sa.Integer(), nullable=False),
        sa.Column("follows_id", sa.Integer(), nullable=True),
        sa.ForeignKeyConstraint(["follows_id"], ["parameter.id"], name=op.f("fk_scan_axis_follows_id")),
        sa.ForeignKeyConstraint(["parameter_id"], ["parameter.id"], name=op.f("fk_scan_axis_parameter_id")),
        sa.ForeignKeyConstraint(["scan_id"], ["scan.id"], name=op.f("fk_scan_axis_scan_id")),
        sa.PrimaryKeyConstraint("scan_id", "parameter_id", name=op.f("pk_scan_axis")),
    )
    op.create_table(
        "shot",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("uid", sa.Text(), nullable=False),
        sa.Column("started_us", sa.BigInteger(), nullable=False),
        sa.Column("sequence_id", sa.Integer(), nullable=False),
        sa.Column("version_id", sa.Integer(), nullable=True),
        sa.Column("scan_id", sa.Integer(), nullable=True),
        sa.Column("reference", sa.Boolean(), nullable=False),
        sa.Column("planned_shots", sa.Integer(), nullable=True),
        sa.Column("last", sa.Boolean(), nullable=False),
        sa.Column("set_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("values_digest", sa.LargeBinary(), nullable=False),
        sa.Column("content_digest", sa.LargeBinary(), nullable=False),
        sa.Column("source_id", sa.Integer(), nullable=True),
        sa.Column("line", sa.Integer(), nullable=True),
        sa.ForeignKeyConstraint(["scan_id"], ["scan.id"], name=op.f("fk_shot_scan_id")),
        sa.ForeignKeyConstraint(["sequence_id"], ["sequence.id"], name=op.f("fk_shot_sequence_id")),
        sa.ForeignKeyConstraint(["set_id"], ["value_set.id"], name=op.f("fk_shot_set_id")),
        sa.ForeignKeyConstraint(["source_id"], ["source.id"], name=op.f("fk_shot_source_id")),
        sa.ForeignKeyConstraint(["version_id"], ["version.id"], name=op.f("fk_shot_version_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_shot")),
        sa.UniqueConstraint("uid", name=op.f("uq_shot_uid")),
    )
    op.create_index(
        "ix_shot_reference",
        "shot",
        ["started_us"],
        unique=False,
        sqlite_where=sa.text("reference = 1"),
        postgresql_where=sa.text("reference"),
    )
    op.create_index(op.f("ix_shot_scan_id_id"), "shot", ["scan_id", "id"], unique=False)
    op.create_index(
        op.f("ix_shot_sequence_id_started_us"), "shot", ["sequence_id", "started_us"], unique=False
    )
    op.create_index(op.f("ix_shot_set_id_id"), "shot", ["set_id", "id"], unique=False)
    op.create_index(op.f("ix_shot_started_us"), "shot", ["started_us"], unique=False)

    op.create_table(
        "amendment",
        sa.Column("shot_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("digest", sa.LargeBinary(), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["shot_id"], ["shot.id"], name=op.f("fk_amendment_shot_id")),
        sa.PrimaryKeyConstraint("shot_id", "digest", name=op.f("pk_amendment")),
    )
    op.create_table(
        "estimate",
        sa.Column("fit_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("position", sa.Integer(), nullable=False),
        sa.Column("value", sa.Double(), nullable=True),
        sa.Column("stderr", sa.Double(), nullable=True),
        sa.Column("low68", sa.Double(), nullable=True),
        sa.Column("high68", sa.Double(), nullable=True),
        sa.Column("low95", sa.Double(), nullable=True),
        sa.Column("high95", sa.Double(), nullable=True),
        sa.Column("unit", sa.Text(), nullable=False),
        sa.Column("fixed", sa.Boolean(), nullable=False),
        sa.ForeignKeyConstraint(["fit_id"], ["fit.id"], name=op.f("fk_estimate_fit_id")),
        sa.PrimaryKeyConstraint("fit_id", "name", name=op.f("pk_estimate")),
    )
    op.create_table(
        "fit_shot",
        sa.Column("fit_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("shot_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("role", sa.Text(), nullable=False),
        sa.CheckConstraint(
            "role IN ('used', 'set aside', 'outlier', 'no value')", name=op.f("ck_fit_shot_role")
        ),
        sa.ForeignKeyConstraint(["fit_id"], ["fit.id"], name=op.f("fk_fit_shot_fit_id")),
        sa.ForeignKeyConstraint(["shot_id"], ["shot.id"], name=op.f("fk_fit_shot_shot_id")),
        sa.PrimaryKeyConstraint("fit_id", "shot_id", name=op.f("pk_fit_shot")),
        sqlite_with_rowid=False,
    )
    op.create_index(op.f("ix_fit_shot_shot_id"), "fit_shot", ["shot_id"], unique=False)

    op.create_table(
        "fit_warning",
        sa.Column("fit_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("code", sa.Text(), nullable=False),
        sa.Column("message", sa.Text(), nullable=False),
        sa.Column("advisory", sa.Boolean(), nullable=False),
        sa.ForeignKeyConstraint(["fit_id"], ["fit.id"], name=op.f("fk_fit_warning_fit_id")),
        sa.PrimaryKeyConstraint("fit_id", "code", name=op.f("pk_fit_warning")),
    )
    op.create_table(
        "frame",
        sa.Column("shot_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("camera", sa.Text(), nullable=False),
        sa.Column("role", sa.Text(), nullable=False),
        sa.Column("path", sa.Text(), nullable=False),
        sa.Column("sha256", sa.Text(), nullable=True),
        sa.ForeignKeyConstraint(["shot_id"], ["shot.id"], name=op.f("fk_frame_shot_id")),
        sa.PrimaryKeyConstraint("shot_id", "camera", "role", name=op.f("pk_frame")),
    )
    op.create_table(
        "past_reading",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("shot_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("observable_id", sa.Integer(), nullable=False),
        sa.Column("value", sa.Double(), nullable=True),
        sa.Column("stderr", sa.Double(), nullable=True),
        sa.Column("state", sa.Text(), nullable=True),
        sa.Column("derivation_id", sa.Integer(), nullable=True),
        sa.Column("until_us", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(
            ["derivation_id"], ["derivation.id"], name=op.f("fk_past_reading_derivation_id")
        ),
        sa.ForeignKeyConstraint(
            ["observable_id"], ["observable.id"], name=op.f("fk_past_reading_observable_id")
        ),
        sa.ForeignKeyConstraint(["shot_id"], ["shot.id"], name=op.f("fk_past_reading_shot_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_past_reading")),
    )
    op.create_index(op.f("ix_past_reading_shot_id"), "past_reading", ["shot_id"], unique=False)

    op.create_table(
        "reading",
        sa.Column("shot_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("observable_id", sa.Integer(), nullable=False),
        sa.Column("value", sa.Double(), nullable=True),
        sa.Column("stderr", sa.Double(), nullable=True),
        sa.Column("state", sa.Text(), nullable=True),
        sa.Column("derivation_id", sa.Integer(), nullable=True),
        sa.ForeignKeyConstraint(["derivation_id"], ["derivation.id"], name=op.f("fk_reading_derivation_id")),
        sa.ForeignKeyConstraint(["observable_id"], ["observable.id"], name=op.f("fk_reading_observable_id")),
        sa.ForeignKeyConstraint(["shot_id"], ["shot.id"], name=op.f("fk_reading_shot_id")),
        sa.PrimaryKeyConstraint("shot_id", "observable_id", name=op.f("pk_reading")),
        sqlite_with_rowid=False,
    )
    op.create_table(
        "set_aside",
        sa.Column("id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("shot_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("by", sa.Text(), nullable=True),
        sa.Column("rule", sa.Text(), nullable=True),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.Column("lifted_us", sa.BigInteger(), nullable=True),
        sa.Column("lifted_by", sa.Text(), nullable=True),
        sa.ForeignKeyConstraint(["shot_id"], ["shot.id"], name=op.f("fk_set_aside_shot_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_set_aside")),
    )
    op.create_index(op.f("ix_set_aside_shot_id"), "set_aside", ["shot_id"], unique=False)

    op.create_table(
        "shot_value",
        sa.Column("shot_id", sa.BigInteger().with_variant(sa.Integer(), "sqlite"), nullable=False),
        sa.Column("parameter_id", sa.Integer(), nullable=False),
        sa.Column("num", sa.Double(), nullable=True),
        sa.Column("exact", sa.Text(), nullable=True),
        sa.Column("swept", sa.Boolean(), nullable=False),
        sa.ForeignKeyConstraint(["parameter_id"], ["parameter.id"], name=op.f("fk_shot_value_parameter_id")),
        sa.ForeignKeyConstraint(["shot_id"], ["shot.id"], name=op.f("fk_shot_value_shot_id")),
        sa.PrimaryKeyConstraint("shot_id", "parameter_id", name=op.f("pk_shot_value")),
        sqlite_with_rowid=False,
    )
    op.create_index(
        op.f("ix_shot_value_parameter_id_num_shot_id"),
        "shot_value",
        ["parameter_id", "num", "shot_id"],
        unique=False,
    )


def downgrade() -> None:
    raise RuntimeError("a store is never downgraded: go back to the copy made before the upgrade")
