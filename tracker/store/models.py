"""Tables. One class a table, no behaviour beyond constraints; units in column names.

What is read at intervals (meters, units measured as a whole, weather stations) is a *series*; its
readings lie in packed monthly blocks (see `blocks`). Meter readings are the truth and are kept;
`site_load_block` is derived from them and can be made anew at any time.
"""

from __future__ import annotations

import datetime as dt
from typing import Any

from sqlalchemy import (
    JSON,
    CheckConstraint,
    DateTime,
    Dialect,
    ForeignKey,
    Index,
    LargeBinary,
    MetaData,
    String,
    TypeDecorator,
    UniqueConstraint,
)
from sqlalchemy.orm import DeclarativeBase, Mapped, mapped_column

#: Every constraint gets a name, otherwise Alembic's SQLite batch mode cannot move it.
NAMING = {
    "ix": "ix_%(table_name)s_%(column_0_N_name)s",
    "uq": "uq_%(table_name)s_%(column_0_N_name)s",
    "ck": "ck_%(table_name)s_%(constraint_name)s",
    "fk": "fk_%(table_name)s_%(column_0_name)s_%(referred_table_name)s",
    "pk": "pk_%(table_name)s",
}

ID_LENGTH = 120


class UtcDateTime(TypeDecorator[dt.datetime]):
    """Aware UTC outside, naive UTC in the database, so that both databases sort alike."""

    impl = DateTime
    cache_ok = True

    def process_bind_param(self, value: dt.datetime | None, dialect: Dialect) -> dt.datetime | None:
        """Refuse naive times: they are local to nobody knows where."""
        del dialect
        if value is None:
            return None
        if value.tzinfo is None:
            raise ValueError(f"a time without zone reached the store: {value}")
        return value.astimezone(dt.UTC).replace(tzinfo=None)

    def process_result_value(
        self, value: dt.datetime | None, dialect: Dialect
    ) -> dt.datetime | None:
        """Give the zone back."""
        del dialect
        return None if value is None else value.replace(tzinfo=dt.UTC)


class Base(DeclarativeBase):
    """Common metadata."""

    metadata = MetaData(naming_convention=NAMING)
    type_annotation_map = {dt.datetime: UtcDateTime, dict[str, Any]: JSON}  # noqa: RUF012 - declared so by SQLAlchemy


class Unit(Base):
    """A transformer: what its nameplate says. NULL is not given, and assumed when it is used."""

    __tablename__ = "unit"
    id: Mapped[int] = mapped_column(primary_key=True)
    unit_id: Mapped[str] = mapped_column(String(ID_LENGTH), unique=True)
    rated_kva: Mapped[float]
    phases: Mapped[int | None]
    hv_volts: Mapped[float | None]
    lv_volts: Mapped[float | None]
    impedance_pct: Mapped[float | None]
    winding_rise_c: Mapped[float | None]
    cooling: Mapped[str | None] = mapped_column(String(20))
    mounting: Mapped[str | None] = mapped_column(String(20))
    year_made: Mapped[int | None]
    no_load_loss_w: Mapped[float | None]
    load_loss_w: Mapped[float | None]
    loss_ratio: Mapped[float | None]
    top_oil_rise_c: Mapped[float | None]
    hot_spot_rise_c: Mapped[float | None]
    oil_exponent: Mapped[float | None]
    winding_exponent: Mapped[float | None]
    top_oil_time_constant_h: Mapped[float | None]
    winding_time_constant_h: Mapped[float | None]
    __table_args__ = (
        CheckConstraint("rated_kva > 0", name="rated_kva_positive"),
        CheckConstraint("phases IN (1, 3)", name="phases_1_or_3"),
    )


class Site(Base):
    """A place on a feeder where a unit stands and to which meters are connected."""

    __tablename__ = "site"
    id: Mapped[int] = mapped_column(primary_key=True)
    site_id: Mapped[str] = mapped_column(String(ID_LENGTH), unique=True)
    feeder: Mapped[str | None] = mapped_column(String(ID_LENGTH))
    latitude: Mapped[float | None]
    longitude: Mapped[float | None]
    customers: Mapped[int | None]
    critical_customers: Mapped[int | None]
    weather_station: Mapped[str | None] = mapped_column(String(ID_LENGTH))


class Placement(Base):
    """A unit at a site, from a moment to a moment (the end excluded); NULL is always."""

    __tablename__ = "placement"
    id: Mapped[int] = mapped_column(primary_key=True)
    unit_key: Mapped[int] = mapped_column(ForeignKey("unit.id", ondelete="CASCADE"), index=True)
    site_key: Mapped[int] = mapped_column(ForeignKey("site.id", ondelete="CASCADE"), index=True)
    starts_at: Mapped[dt.datetime | None]
    ends_at: Mapped[dt.datetime | None]
    __table_args__ = (CheckConstraint("starts_at < ends_at", name="starts_before_end"),)


class Series(Base):
    """Something read at intervals: a meter, a unit measured as a whole, a weather station."""

    __tablename__ = "series"
    id: Mapped[int] = mapped_column(primary_key=True)
    kind: Mapped[str] = mapped_column(String(10))
    name: Mapped[str] = mapped_column(String(ID_LENGTH))
    power_factor: Mapped[float | None]  #: given with its readings, for all of them
    customer_class: Mapped[str | None] = mapped_column(String(ID_LENGTH))
    __table_args__ = (
        UniqueConstraint("kind", "name"),
        CheckConstraint("kind IN ('meter', 'unit', 'station')", name="kind_known"),
        CheckConstraint("power_factor > 0 AND power_factor <= 1", name="power_factor_in_range"),
    )


class MeterConnection(Base):
    """A meter at a site, from a moment to a moment (the end excluded); NULL is always."""

    __tablename__ = "meter_connection"
    id: Mapped[int] = mapped_column(primary_key=True)
    meter_key: Mapped[int] = mapped_column(ForeignKey("series.id", ondelete="CASCADE"), index=True)
    site_key: Mapped[int] = mapped_column(ForeignKey("site.id", ondelete="CASCADE"), index=True)
    starts_at: Mapped[dt.datetime | None]
    ends_at: Mapped[dt.datetime | None]
    multiplier: Mapped[float]
    power_factor: Mapped[float | None]  #: of this meter; stands before that of its readings
    __table_args__ = (
        CheckConstraint("starts_at < ends_at", name="starts_before_end"),
        CheckConstraint("multiplier > 0", name="multiplier_positive"),
        CheckConstraint("power_factor > 0 AND power_factor <= 1", name="power_factor_in_range"),
    )


class ReadingBlock(Base):
    """One series, one quantity, one month of readings, packed."""

    __tablename__ = "reading_block"
    series_key: Mapped[int] = mapped_column(
        ForeignKey("series.id", ondelete="CASCADE"), primary_key=True
    )
    quantity: Mapped[str] = mapped_column(String(12), primary_key=True)
    month: Mapped[int] = mapped_column(primary_key=True)
    n_held: Mapped[int]  #: values held, so that blocks with gaps are found without unpacking
    payload: Mapped[bytes] = mapped_column(LargeBinary)


class SupersededBlock(Base):
    """What a file's corrections replaced: the former values, packed, empty elsewhere."""

    __tablename__ = "superseded_block"
    series_key: Mapped[int] = mapped_column(
        ForeignKey("series.id", ondelete="CASCADE"), primary_key=True
    )
    quantity: Mapped[str] = mapped_column(String(12), primary_key=True)
    month: Mapped[int] = mapped_column(primary_key=True)
    replaced_by: Mapped[int] = mapped_column(ForeignKey("intake_file.id"), primary_key=True)
    payload: Mapped[bytes] = mapped_column(LargeBinary)


class SiteLoadBlock(Base):
    """One site, one month of load [kVA], packed; derived from the readings."""

    __tablename__ = "site_load_block"
    site_key: Mapped[int] = mapped_column(
        ForeignKey("site.id", ondelete="CASCADE"), primary_key=True
    )
    month: Mapped[int] = mapped_column(primary_key=True)
    payload: Mapped[bytes] = mapped_column(LargeBinary)
    measured: Mapped[bytes | None] = mapped_column(LargeBinary)
    """Share of the energy of each value that was measured, uint8 in 1/200; NULL: all of it."""


class MonthlyEnergy(Base):
    """Energy of a meter that is read at long intervals, from a moment to a moment.

    A corrected figure stays, with the file that replaced it.
    """

    __tablename__ = "monthly_energy"
    id: Mapped[int] = mapped_column(primary_key=True)
    meter_key: Mapped[int] = mapped_column(ForeignKey("series.id", ondelete="CASCADE"), index=True)
    starts_at: Mapped[dt.datetime]
    ends_at: Mapped[dt.datetime]
    kwh: Mapped[float]
    replaced_by: Mapped[int | None] = mapped_column(ForeignKey("intake_file.id"))
    __table_args__ = (CheckConstraint("starts_at < ends_at", name="starts_before_end"),)


class SpreadBlock(Base):
    """One meter's monthly energy spread over the intervals of a month [kW]; derived, packed."""

    __tablename__ = "spread_block"
    series_key: Mapped[int] = mapped_column(
        ForeignKey("series.id", ondelete="CASCADE"), primary_key=True
    )
    month: Mapped[int] = mapped_column(primary_key=True)
    payload: Mapped[bytes] = mapped_column(LargeBinary)


class UnmeteredLoad(Base):
    """Load at a site that no meter reads, such as street lights.

    A corrected figure stays, with the file that replaced it.
    """

    __tablename__ = "unmetered_load"
    id: Mapped[int] = mapped_column(primary_key=True)
    site_key: Mapped[int] = mapped_column(ForeignKey("site.id", ondelete="CASCADE"), index=True)
    hours: Mapped[str] = mapped_column(String(20))
    kw: Mapped[float]
    replaced_by: Mapped[int | None] = mapped_column(ForeignKey("intake_file.id"))
    __table_args__ = (
        CheckConstraint("hours IN ('always', 'dusk to dawn')", name="hours_known"),
        CheckConstraint("kw >= 0", name="kw_not_negative"),
    )


class ReadingRule(Base):
    """A rule of validation and filling that was set otherwise than its default."""

    __tablename__ = "reading_rule"
    name: Mapped[str] = mapped_column(String(40), primary_key=True)
    value: Mapped[float]


class IntakeFile(Base):
    """Intake ledger: every file, and what became of its rows."""

    __tablename__ = "intake_file"
    id: Mapped[int] = mapped_column(primary_key=True)
    kind: Mapped[str] = mapped_column(String(20))
    name: Mapped[str]
    fingerprint: Mapped[str] = mapped_column(String(32))
    imported_at: Mapped[dt.datetime]
    options: Mapped[dict[str, Any]]
    readings: Mapped[int]
    taken: Mapped[int]
    unchanged: Mapped[int]
    corrected: Mapped[int]
    refused: Mapped[int]
    facts: Mapped[dict[str, Any] | None]  #: what was found or assumed on the way
    __table_args__ = (
        CheckConstraint("readings = taken + unchanged + corrected + refused", name="fates_add_up"),
    )


class IntakeRefusal(Base):
    """Intake ledger: every refused row, with the reason and what stood there."""

    __tablename__ = "intake_refusal"
    id: Mapped[int] = mapped_column(primary_key=True)
    file_key: Mapped[int] = mapped_column(
        ForeignKey("intake_file.id", ondelete="CASCADE"), index=True
    )
    line: Mapped[int]
    column: Mapped[str]
    code: Mapped[str] = mapped_column(String(40))
    reason: Mapped[str]
    text: Mapped[str]


class Assessment(Base):
    """One run of the thermal model over the fleet; unfinished ones are shown to nobody."""

    __tablename__ = "assessment"
    id: Mapped[int] = mapped_column(primary_key=True)
    made_at: Mapped[dt.datetime]
    finished_at: Mapped[dt.datetime | None]
    program_version: Mapped[str] = mapped_column(String(40))
    settings: Mapped[dict[str, Any]]
    starts_at: Mapped[dt.datetime]
    ends_at: Mapped[dt.datetime]
    data_fingerprint: Mapped[str] = mapped_column(String(32))


class UnitResult(Base):
    """One unit's figures in an assessment, and its thermal state at the assessment's end.

    Figures are NULL where no interval counted.
    """

    __tablename__ = "unit_result"
    assessment_key: Mapped[int] = mapped_column(
        ForeignKey("assessment.id", ondelete="CASCADE"), primary_key=True
    )
    unit_key: Mapped[int] = mapped_column(
        ForeignKey("unit.id", ondelete="CASCADE"), primary_key=True
    )
    site_key: Mapped[int | None] = mapped_column(ForeignKey("site.id"))
    peak_load_pct: Mapped[float | None]
    peak_hot_spot_c: Mapped[float | None]
    peak_hot_spot_at: Mapped[dt.datetime | None]
    peak_top_oil_c: Mapped[float | None]
    hours_over_rating: Mapped[float]
    hours_over_hot_spot_limit: Mapped[float]
    aging_hours: Mapped[float]
    aging_factor: Mapped[float | None]
    life_used_pct: Mapped[float | None]
    counted_hours: Mapped[float]
    coverage_pct: Mapped[float]
    end_top_oil_rise_k: Mapped[float | None]
    end_hot_spot_gradient_k: Mapped[float | None]
    end_last_load_pu: Mapped[float | None]
    end_hole_h: Mapped[float | None]
    end_warm_up_left_h: Mapped[float | None]
    __table_args__ = (Index(None, "assessment_key", "peak_hot_spot_c"),)
