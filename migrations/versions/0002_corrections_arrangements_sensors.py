"""Corrections of settings, sweeps of derived parameters, scans arranged by hand, other names of machines, sensors.

Why: shots as laboratories really take them. A card that is used again after another one is a row of its own, so that
the history of a machine's cards is whole.
What happens to old rows: nothing; tables are added, and one constraint is dropped.
"""

from __future__ import annotations

import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None

BIG_ID = sa.BigInteger().with_variant(sa.Integer(), "sqlite")


def upgrade() -> None:
    op.create_table(
        "machine_alias",
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("machine_id", sa.Integer(), nullable=False),
        sa.Column("by", sa.Text(), nullable=True),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["machine_id"], ["machine.id"], name=op.f("fk_machine_alias_machine_id")),
        sa.PrimaryKeyConstraint("name", name=op.f("pk_machine_alias")),
    )
    op.create_table(
        "swept_derived",
        sa.Column("shot_id", BIG_ID, nullable=False),
        sa.Column("parameter_id", sa.Integer(), nullable=False),
        sa.ForeignKeyConstraint(
            ["parameter_id"], ["parameter.id"], name=op.f("fk_swept_derived_parameter_id")
        ),
        sa.ForeignKeyConstraint(["shot_id"], ["shot.id"], name=op.f("fk_swept_derived_shot_id")),
        sa.PrimaryKeyConstraint("shot_id", "parameter_id", name=op.f("pk_swept_derived")),
        sqlite_with_rowid=False,
    )
    op.create_table(
        "correction",
        sa.Column("id", BIG_ID, nullable=False),
        sa.Column("shot_id", BIG_ID, nullable=False),
        sa.Column("parameter_id", sa.Integer(), nullable=False),
        sa.Column("old_num", sa.Double(), nullable=True),
        sa.Column("old_exact", sa.Text(), nullable=True),
        sa.Column("new_num", sa.Double(), nullable=True),
        sa.Column("new_exact", sa.Text(), nullable=True),
        sa.Column("old_digest", sa.LargeBinary(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=False),
        sa.Column("by", sa.Text(), nullable=True),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.ForeignKeyConstraint(["parameter_id"], ["parameter.id"], name=op.f("fk_correction_parameter_id")),
        sa.ForeignKeyConstraint(["shot_id"], ["shot.id"], name=op.f("fk_correction_shot_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_correction")),
    )
    op.create_index(op.f("ix_correction_shot_id"), "correction", ["shot_id"], unique=False)

    op.create_table(
        "arrangement",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("kind", sa.Text(), nullable=False),
        sa.Column("reason", sa.Text(), nullable=True),
        sa.Column("by", sa.Text(), nullable=True),
        sa.Column("at_us", sa.BigInteger(), nullable=False),
        sa.Column("undone_us", sa.BigInteger(), nullable=True),
        sa.Column("undone_by", sa.Text(), nullable=True),
        sa.CheckConstraint("kind IN ('join', 'split')", name=op.f("ck_arrangement_kind")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_arrangement")),
    )
    op.create_table(
        "arranged",
        sa.Column("arrangement_id", sa.Integer(), nullable=False),
        sa.Column("shot_id", BIG_ID, nullable=False),
        sa.Column("from_scan", sa.Integer(), nullable=False),
        sa.Column("to_scan", sa.Integer(), nullable=False),
        sa.ForeignKeyConstraint(
            ["arrangement_id"], ["arrangement.id"], name=op.f("fk_arranged_arrangement_id")
        ),
        sa.ForeignKeyConstraint(["shot_id"], ["shot.id"], name=op.f("fk_arranged_shot_id")),
        sa.PrimaryKeyConstraint("arrangement_id", "shot_id", name=op.f("pk_arranged")),
        sqlite_with_rowid=False,
    )
    op.create_index(op.f("ix_arranged_shot_id"), "arranged", ["shot_id"], unique=False)

    op.create_table(
        "sensor",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("machine_id", sa.Integer(), nullable=False),
        sa.Column("name", sa.Text(), nullable=False),
        sa.Column("unit", sa.Text(), nullable=True),
        sa.ForeignKeyConstraint(["machine_id"], ["machine.id"], name=op.f("fk_sensor_machine_id")),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_sensor")),
        sa.UniqueConstraint("machine_id", "name", name=op.f("uq_sensor_machine_id_name")),
    )
    op.create_table(
        "sensor_hour",
        sa.Column("sensor_id", sa.Integer(), nullable=False),
        sa.Column("hour", sa.Integer(), nullable=False),
        sa.Column("n", sa.Integer(), nullable=False),
        sa.Column("first_us", sa.BigInteger(), nullable=False),
        sa.Column("last_us", sa.BigInteger(), nullable=False),
        sa.Column("readings", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(["sensor_id"], ["sensor.id"], name=op.f("fk_sensor_hour_sensor_id")),
        sa.PrimaryKeyConstraint("sensor_id", "hour", name=op.f("pk_sensor_hour")),
    )
    with op.batch_alter_table("card") as card:
        card.drop_constraint(op.f("uq_card_machine_id_digest"), type_="unique")
