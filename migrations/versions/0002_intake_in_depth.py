"""intake in depth: reactive readings, monthly energy, unmetered load, rules of validation

Revision ID: 0002
Revises: 0001
"""

import numpy as np
import sqlalchemy as sa
from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None

#: Blocks copied at a time.
BLOCKS = 2_000


def upgrade() -> None:
    with op.batch_alter_table("series") as batch:
        batch.add_column(sa.Column("customer_class", sa.String(length=120), nullable=True))
    with op.batch_alter_table("meter_connection") as batch:
        batch.add_column(sa.Column("power_factor", sa.Double(), nullable=True))
        batch.create_check_constraint(
            op.f("ck_meter_connection_power_factor_in_range"),
            "power_factor > 0 AND power_factor <= 1",
        )
    with op.batch_alter_table("site_load_block") as batch:
        batch.add_column(sa.Column("measured", sa.LargeBinary(), nullable=True))
    with op.batch_alter_table("intake_file") as batch:
        batch.add_column(sa.Column("facts", sa.JSON(), nullable=True))
    _count_held_readings()
    op.create_table(
        "monthly_energy",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("meter_key", sa.Integer(), nullable=False),
        sa.Column("starts_at", sa.DateTime(), nullable=False),
        sa.Column("ends_at", sa.DateTime(), nullable=False),
        sa.Column("kwh", sa.Double(), nullable=False),
        sa.Column("replaced_by", sa.Integer(), nullable=True),
        sa.CheckConstraint("starts_at < ends_at", name=op.f("ck_monthly_energy_starts_before_end")),
        sa.ForeignKeyConstraint(
            ["meter_key"],
            ["series.id"],
            name=op.f("fk_monthly_energy_meter_key_series"),
            ondelete="CASCADE",
        ),
        sa.ForeignKeyConstraint(
            ["replaced_by"],
            ["intake_file.id"],
            name=op.f("fk_monthly_energy_replaced_by_intake_file"),
        ),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_monthly_energy")),
    )
    op.create_index(op.f("ix_monthly_energy_meter_key"), "monthly_energy", ["meter_key"])
    op.create_table(
        "spread_block",
        sa.Column("series_key", sa.Integer(), nullable=False),
        sa.Column("month", sa.Integer(), nullable=False),
        sa.Column("payload", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(
            ["series_key"],
            ["series.id"],
            name=op.f("fk_spread_block_series_key_series"),
            ondelete="CASCADE",
        ),
        sa.PrimaryKeyConstraint("series_key", "month", name=op.f("pk_spread_block")),
    )
    op.create_table(
        "unmetered_load",
        sa.Column("id", sa.Integer(), nullable=False),
        sa.Column("site_key", sa.Integer(), nullable=False),
        sa.Column("hours", sa.String(length=20), nullable=False),
        sa.Column("kw", sa.Double(), nullable=False),
        sa.Column("replaced_by", sa.Integer(), nullable=True),
        sa.CheckConstraint(
            "hours IN ('always', 'dusk to dawn')", name=op.f("ck_unmetered_load_hours_known")
        ),
        sa.CheckConstraint("kw >= 0", name=op.f("ck_unmetered_load_kw_not_negative")),
        sa.ForeignKeyConstraint(
            ["site_key"],
            ["site.id"],
            name=op.f("fk_unmetered_load_site_key_site"),
            ondelete="CASCADE",
        ),
        sa.ForeignKeyConstraint(
            ["replaced_by"],
            ["intake_file.id"],
            name=op.f("fk_unmetered_load_replaced_by_intake_file"),
        ),
        sa.PrimaryKeyConstraint("id", name=op.f("pk_unmetered_load")),
    )
    op.create_index(op.f("ix_unmetered_load_site_key"), "unmetered_load", ["site_key"])
    op.create_table(
        "reading_rule",
        sa.Column("name", sa.String(length=40), nullable=False),
        sa.Column("value", sa.Double(), nullable=False),
        sa.PrimaryKeyConstraint("name", name=op.f("pk_reading_rule")),
    )


def _count_held_readings() -> None:
    """Rebuild the blocks of readings with the number of values each holds beside them.

    A block ends in a byte of flags for each of its values, 0 where nothing is held; how many it has
    stands in bytes 4 to 8 (version 1 of the layout).
    """
    op.rename_table("reading_block", "reading_block_0001")
    op.create_table(
        "reading_block",
        sa.Column("series_key", sa.Integer(), nullable=False),
        sa.Column("quantity", sa.String(length=12), nullable=False),
        sa.Column("month", sa.Integer(), nullable=False),
        sa.Column("n_held", sa.Integer(), nullable=False),
        sa.Column("payload", sa.LargeBinary(), nullable=False),
        sa.ForeignKeyConstraint(
            ["series_key"],
            ["series.id"],
            name=op.f("fk_reading_block_series_key_series"),
            ondelete="CASCADE",
        ),
        sa.PrimaryKeyConstraint("series_key", "quantity", "month", name=op.f("pk_reading_block")),
    )
    names = ("series_key", "quantity", "month", "n_held", "payload")
    new = sa.table("reading_block", *map(sa.column, names))
    old = sa.table("reading_block_0001", *map(sa.column, names))
    place = sa.tuple_(old.c.series_key, old.c.quantity, old.c.month)
    connection = op.get_bind()
    query = (
        sa.select(old.c.series_key, old.c.quantity, old.c.month, old.c.payload)
        .order_by(old.c.series_key, old.c.quantity, old.c.month)
        .limit(BLOCKS)
    )
    rows = connection.execute(query).all()
    while rows:
        connection.execute(
            sa.insert(new), [{**row._mapping, "n_held": _n_held(row.payload)} for row in rows]
        )
        rows = connection.execute(query.where(place > tuple(rows[-1][:3]))).all()
    op.drop_table("reading_block_0001")


def _n_held(payload: bytes) -> int:
    n_value = int.from_bytes(payload[4:8], "little")
    return int(np.count_nonzero(np.frombuffer(payload[-n_value:], dtype=np.uint8)))
