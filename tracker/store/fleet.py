"""Units, sites, and who stands where from when to when."""

from __future__ import annotations

import datetime as dt
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, fields
from operator import itemgetter
from typing import Any

from sqlalchemy import Connection, RowMapping, delete, insert, select, update

from tracker.errors import InputError
from tracker.fleet.nameplate import Nameplate
from tracker.store.keys import in_parts
from tracker.store.models import MeterConnection, Placement, Series, Site, Unit

NAMEPLATE_COLUMNS = tuple(field.name for field in fields(Nameplate))

#: What a register row says of the unit, and what of the place it stands.
UNIT_COLUMNS = tuple(
    column.key for column in Unit.__table__.columns if column.key not in ("id", "unit_id")
)
SITE_COLUMNS = tuple(
    column.key for column in Site.__table__.columns if column.key not in ("id", "site_id")
)


def nameplate(row: Mapping[Any, Any] | RowMapping) -> Nameplate:
    """Return the nameplate in a row of the register, given under its columns' names."""
    return Nameplate(**{name: row[name] for name in NAMEPLATE_COLUMNS})


@dataclass(frozen=True, slots=True)
class Span:
    """From a moment to a moment, the end excluded; None is always."""

    starts_at: dt.datetime | None = None
    ends_at: dt.datetime | None = None

    def overlaps(self, other: Span) -> bool:
        """Say whether the two have a moment in common."""
        return _before(self.starts_at, other.ends_at) and _before(other.starts_at, self.ends_at)

    def __str__(self) -> str:
        start = f"from {self.starts_at:%Y-%m-%d}" if self.starts_at else "always"
        return f"{start} to {self.ends_at:%Y-%m-%d}" if self.ends_at else start


def _before(start: dt.datetime | None, end: dt.datetime | None) -> bool:
    return start is None or end is None or start < end


@dataclass(frozen=True, slots=True)
class Stay:
    """Something at a site for a span: a unit's placement or a meter's connection."""

    key: int  #: of the placement or connection
    who: int  #: key of the unit or meter
    site_key: int
    span: Span
    multiplier: float = 1.0
    power_factor: float | None = None


@dataclass(frozen=True, slots=True)
class UnitRecord:
    """All the register says of one unit."""

    key: int
    unit_id: str
    nameplate: Nameplate
    hv_volts: float | None
    lv_volts: float | None
    impedance_pct: float | None
    mounting: str | None
    year_made: int | None
    placements: Sequence[tuple[str, Span]]  #: (site id, span), earliest first
    site: Mapping[str, Any] | None  #: the newest placement's site: site_id, feeder, customers …


def unit_record(connection: Connection, unit_id: str) -> UnitRecord:
    """Return what the register says of a unit.

    Raises
    ------
    InputError
        If there is no such unit.
    """
    row = connection.execute(select(Unit.__table__).where(Unit.unit_id == unit_id)).first()
    if row is None:
        raise InputError(f"unit {unit_id!r} is not in the store. `tracker rank` lists the units.")
    stays = connection.execute(
        select(Site.__table__, Placement.starts_at, Placement.ends_at)
        .join_from(Placement, Site, Placement.site_key == Site.id)
        .where(Placement.unit_key == row.id)
        .order_by(Placement.starts_at.is_not(None), Placement.starts_at)
    ).all()
    newest = dict(stays[-1]._mapping) if stays else None
    return UnitRecord(
        row.id,
        row.unit_id,
        nameplate(row._mapping),
        row.hv_volts,
        row.lv_volts,
        row.impedance_pct,
        row.mounting,
        row.year_made,
        [(stay.site_id, Span(stay.starts_at, stay.ends_at)) for stay in stays],
        newest and {name: newest[name] for name in ("site_id", *SITE_COLUMNS)},
    )


# --- Reading the whole fleet ----------------------------------------------------------------------


def units(connection: Connection, unit_ids: Collection[str] | None = None) -> list[dict[str, Any]]:
    """Return units by unit id, all or those named: id, unit_id and the register's columns."""
    query = select(Unit.__table__)
    rows = _all_or_named(connection, query, Unit.unit_id, unit_ids)
    names = Unit.__table__.columns.keys()
    return sorted((dict(zip(names, row, strict=True)) for row in rows), key=itemgetter("unit_id"))


def _all_or_named(
    connection: Connection, query: Any, column: Any, names: Collection[Any] | None
) -> list[Any]:
    """Return all rows, or those whose column is one of the names."""
    if names is None:
        return list(connection.execute(query))
    parts = in_parts(sorted(names))
    return [row for part in parts for row in connection.execute(query.where(column.in_(part)))]


def sites(connection: Connection) -> list[dict[str, Any]]:
    """Return all sites by site id: id, site_id and the register's columns."""
    query = select(Site.__table__).order_by(Site.site_id)
    return [dict(row._mapping) for row in connection.execute(query)]


def placements(connection: Connection, unit_keys: Collection[int] | None = None) -> list[Stay]:
    """Return the stays of units at sites, of all or those named, by unit and start."""
    query = select(
        Placement.id, Placement.unit_key, Placement.site_key, Placement.starts_at, Placement.ends_at
    ).order_by(Placement.unit_key, Placement.starts_at.is_not(None), Placement.starts_at)
    rows = _all_or_named(connection, query, Placement.unit_key, unit_keys)
    return [Stay(row[0], row[1], row[2], Span(row[3], row[4])) for row in rows]


def removed_units(connection: Connection) -> dict[str, dt.datetime]:
    """Return when each unit that stands nowhere any more was removed: {unit id: moment}."""
    query = (
        select(Unit.unit_id, Placement.ends_at)
        .join_from(Placement, Unit, Placement.unit_key == Unit.id)
        .order_by(Placement.starts_at.is_not(None), Placement.starts_at)
    )
    last = {row[0]: row[1] for row in connection.execute(query)}
    return {unit_id: ends_at for unit_id, ends_at in last.items() if ends_at is not None}


def connections(connection: Connection) -> list[Stay]:
    """Return every meter's stays at sites, by meter and start."""
    query = select(
        MeterConnection.id,
        MeterConnection.meter_key,
        MeterConnection.site_key,
        MeterConnection.starts_at,
        MeterConnection.ends_at,
        MeterConnection.multiplier,
        MeterConnection.power_factor,
    ).order_by(
        MeterConnection.meter_key, MeterConnection.starts_at.is_not(None), MeterConnection.starts_at
    )
    return [
        Stay(row[0], row[1], row[2], Span(row[3], row[4]), row[5], row[6])
        for row in connection.execute(query)
    ]


def stations_named(connection: Connection) -> dict[int, str | None]:
    """Return the weather station that each site names: {site key: name}."""
    rows = connection.execute(select(Site.id, Site.weather_station)).all()
    return {row[0]: row[1] for row in rows}


def stations(connection: Connection) -> dict[str, int]:
    """Return the weather stations that readings are held of: {name: series key}."""
    query = select(Series.name, Series.id).where(Series.kind == "station").order_by(Series.name)
    return {row.name: row.id for row in connection.execute(query)}


def unit_series(connection: Connection) -> dict[int, int]:
    """Return the units measured as a whole: {unit key: series key}."""
    query = select(Unit.id, Series.id).join_from(Unit, Series, Series.name == Unit.unit_id)
    return {row[0]: row[1] for row in connection.execute(query.where(Series.kind == "unit"))}


# --- Writing --------------------------------------------------------------------------------------


def add_rows(
    connection: Connection, table: type[Unit] | type[Site], rows: Sequence[Mapping[str, Any]]
) -> None:
    """Insert units or sites."""
    if rows:
        connection.execute(insert(table), list(rows))


def change_row(
    connection: Connection, table: type[Unit] | type[Site], key: int, values: Mapping[str, Any]
) -> None:
    """Give a unit or a site other values."""
    connection.execute(update(table).where(table.id == key).values(**values))


def add_placements(connection: Connection, stays: Sequence[Stay]) -> None:
    """Insert placements; their keys are given by the database."""
    rows = [
        {
            "unit_key": stay.who,
            "site_key": stay.site_key,
            "starts_at": stay.span.starts_at,
            "ends_at": stay.span.ends_at,
        }
        for stay in stays
    ]
    if rows:
        connection.execute(insert(Placement), rows)


def add_connections(connection: Connection, stays: Sequence[Stay]) -> None:
    """Insert connections; their keys are given by the database."""
    rows = [
        {
            "meter_key": stay.who,
            "site_key": stay.site_key,
            "starts_at": stay.span.starts_at,
            "ends_at": stay.span.ends_at,
            "multiplier": stay.multiplier,
            "power_factor": stay.power_factor,
        }
        for stay in stays
    ]
    if rows:
        connection.execute(insert(MeterConnection), rows)


def remove_stays(
    connection: Connection, table: type[Placement] | type[MeterConnection], keys: Sequence[int]
) -> None:
    """Delete placements or connections that others take the place of."""
    if keys:
        connection.execute(delete(table).where(table.id.in_(keys)))
