"""Energy of meters that are read once a month, how it is spread, and load that no meter reads; SQL only."""

from __future__ import annotations

import datetime as dt
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass

from sqlalchemy import Connection, bindparam, delete, insert, or_, select, update

from tracker.store.keys import among, in_parts
from tracker.store.models import (
    MeterConnection,
    MonthlyEnergy,
    Series,
    Site,
    SpreadBlock,
    UnmeteredLoad,
)


@dataclass(frozen=True, slots=True)
class MeterEnergy:
    """Energy of a meter from a moment to a moment."""

    key: int  #: of the row
    meter_key: int
    starts_at: dt.datetime
    ends_at: dt.datetime
    kwh: float


_ENERGY = (
    select(
        MonthlyEnergy.id,
        MonthlyEnergy.meter_key,
        MonthlyEnergy.starts_at,
        MonthlyEnergy.ends_at,
        MonthlyEnergy.kwh,
    )
    .where(MonthlyEnergy.replaced_by.is_(None))
    .order_by(MonthlyEnergy.meter_key, MonthlyEnergy.starts_at)
)


def monthly_energy(
    connection: Connection, meters: Collection[int] | None = None
) -> list[MeterEnergy]:
    """Return the energy in force, of all meters or those named, by meter and start."""
    named = [_ENERGY]
    if meters is not None:
        parts = in_parts(sorted(meters))
        named = [_ENERGY.where(MonthlyEnergy.meter_key.in_(part)) for part in parts]
    return [MeterEnergy(*row) for query in named for row in connection.execute(query)]


def energy_between(
    connection: Connection, starts_at: dt.datetime, ends_at: dt.datetime
) -> list[MeterEnergy]:
    """Return the energy in force that any part of a period belongs to, by meter and start."""
    query = _ENERGY.where(MonthlyEnergy.starts_at < ends_at, MonthlyEnergy.ends_at > starts_at)
    return [MeterEnergy(*row) for row in connection.execute(query)]


def replace_energy(
    connection: Connection, rows: Sequence[MeterEnergy], former: Sequence[int], file_key: int
) -> None:
    """Write energy down; the `former` rows stay, with the file that replaced them."""
    if former:
        connection.execute(
            update(MonthlyEnergy)
            .where(MonthlyEnergy.id == bindparam("k"))
            .values(replaced_by=file_key),
            [{"k": key} for key in former],
        )
    if rows:
        connection.execute(
            insert(MonthlyEnergy),
            [
                {
                    "meter_key": row.meter_key,
                    "starts_at": row.starts_at,
                    "ends_at": row.ends_at,
                    "kwh": row.kwh,
                }
                for row in rows
            ],
        )


# --- Classes and feeders --------------------------------------------------------------------------


def classes(connection: Connection, meters: Collection[int]) -> dict[int, str | None]:
    """Return the class of each meter."""
    found: dict[int, str | None] = {}
    for part in in_parts(sorted(meters)):
        query = select(Series.id, Series.customer_class).where(Series.id.in_(part))
        found.update((row[0], row[1]) for row in connection.execute(query))
    return found


def set_classes(connection: Connection, classes_of: Mapping[int, str]) -> None:
    """Note the class of meters."""
    if classes_of:
        connection.execute(
            update(Series).where(Series.id == bindparam("k")).values(customer_class=bindparam("c")),
            [{"k": key, "c": name} for key, name in classes_of.items()],
        )


def meters_of_classes(
    connection: Connection, names: Collection[str | None]
) -> list[tuple[int, str | None]]:
    """Return (meter key, class) of the meters of some classes; None is those without one."""
    given = sorted(name for name in names if name is not None)
    wanted = Series.customer_class.in_(given)
    query = select(Series.id, Series.customer_class).where(
        Series.kind == "meter",
        or_(wanted, Series.customer_class.is_(None)) if None in names else wanted,
    )
    return [(row[0], row[1]) for row in connection.execute(query.order_by(Series.name))]


@dataclass(frozen=True, slots=True)
class OnFeeder:
    """A meter on a feeder, from a moment to a moment."""

    meter_key: int
    feeder: str | None
    starts_at: dt.datetime | None
    ends_at: dt.datetime | None


def meters_on_feeders(connection: Connection, meters: Collection[int]) -> list[OnFeeder]:
    """Return the feeders that meters hang on, by meter and start."""
    found: list[OnFeeder] = []
    for part in in_parts(sorted(meters)):
        query = (
            select(
                MeterConnection.meter_key,
                Site.feeder,
                MeterConnection.starts_at,
                MeterConnection.ends_at,
            )
            .join_from(MeterConnection, Site, MeterConnection.site_key == Site.id)
            .where(MeterConnection.meter_key.in_(part))
            .order_by(
                MeterConnection.meter_key,
                MeterConnection.starts_at.is_not(None),
                MeterConnection.starts_at,
            )
        )
        found += [OnFeeder(*row) for row in connection.execute(query)]
    return found


# --- Spread energy --------------------------------------------------------------------------------


def spread_blocks(
    connection: Connection, keys: Sequence[int], months: tuple[int, int]
) -> Iterator[tuple[int, int, bytes]]:
    """Yield (series key, month, payload) of spread energy, both months included."""
    for part in in_parts(keys):
        query = select(SpreadBlock.series_key, SpreadBlock.month, SpreadBlock.payload).where(
            among(SpreadBlock.series_key, part), SpreadBlock.month.between(*months)
        )
        yield from connection.execute(query)


def all_spread_blocks(connection: Connection) -> dict[tuple[int, int], bytes]:
    """Return all spread energy: {(series key, month): payload}."""
    query = select(SpreadBlock.series_key, SpreadBlock.month, SpreadBlock.payload)
    return {(row[0], row[1]): row[2] for row in connection.execute(query)}


def replace_spread(
    connection: Connection, payloads: Mapping[tuple[int, int], bytes | None]
) -> None:
    """Write spread energy: {(series key, month): payload}; None takes away what was there."""
    if not payloads:
        return
    connection.execute(
        delete(SpreadBlock).where(
            SpreadBlock.series_key == bindparam("k"), SpreadBlock.month == bindparam("m")
        ),
        [{"k": key, "m": month} for key, month in payloads],
    )
    rows = [
        {"series_key": key, "month": month, "payload": payload}
        for (key, month), payload in payloads.items()
        if payload is not None
    ]
    if rows:
        connection.execute(insert(SpreadBlock), rows)


# --- Unmetered load -------------------------------------------------------------------------------


def unmetered_rows(connection: Connection) -> dict[tuple[int, str], tuple[int, float]]:
    """Return the unmetered load in force: {(site key, hours): (row key, kW)}."""
    query = select(
        UnmeteredLoad.site_key, UnmeteredLoad.hours, UnmeteredLoad.id, UnmeteredLoad.kw
    ).where(UnmeteredLoad.replaced_by.is_(None))
    return {(row[0], row[1]): (row[2], row[3]) for row in connection.execute(query)}


def replace_unmetered(
    connection: Connection,
    rows: Mapping[tuple[int, str], float],
    former: Sequence[int],
    file_key: int,
) -> None:
    """Write unmetered load down; the `former` rows stay, with the file that replaced them."""
    if former:
        connection.execute(
            update(UnmeteredLoad)
            .where(UnmeteredLoad.id == bindparam("k"))
            .values(replaced_by=file_key),
            [{"k": key} for key in former],
        )
    if rows:
        connection.execute(
            insert(UnmeteredLoad),
            [{"site_key": site, "hours": hours, "kw": kw} for (site, hours), kw in rows.items()],
        )
