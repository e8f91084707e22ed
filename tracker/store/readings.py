"""Series and their blocks of readings, site loads; SQL only, values stay packed."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from sqlalchemy import (
    Connection,
    bindparam,
    delete,
    func,
    insert,
    or_,
    select,
    update,
)

from tracker.store.blocks import Blocks
from tracker.store.keys import in_parts
from tracker.store.models import (
    MeterConnection,
    Placement,
    ReadingBlock,
    Series,
    SiteLoadBlock,
    SupersededBlock,
    Unit,
)


def series_keys(connection: Connection, kind: str, names: Sequence[str]) -> dict[str, int]:
    """Return the key of each series of a kind, adding those that are not known yet."""
    known = _known_series(connection, kind, names)
    missing = [name for name in names if name not in known]
    if missing:
        connection.execute(insert(Series), [{"kind": kind, "name": name} for name in missing])
        known |= _known_series(connection, kind, missing)
    return known


def _known_series(connection: Connection, kind: str, names: Sequence[str]) -> dict[str, int]:
    known: dict[str, int] = {}
    for part in in_parts(names):
        query = select(Series.name, Series.id).where(Series.kind == kind, Series.name.in_(part))
        known.update((row.name, row.id) for row in connection.execute(query))
    return known


def set_power_factor(connection: Connection, keys: Sequence[int], power_factor: float) -> list[int]:
    """Note the power factor of series; return the keys of those it was another for."""
    changed: list[int] = []
    for part in in_parts(keys):
        other = or_(Series.power_factor.is_(None), Series.power_factor != power_factor)
        query = select(Series.id).where(Series.id.in_(part), other)
        changed += connection.scalars(query)
    for part in in_parts(changed):
        connection.execute(
            update(Series).where(Series.id.in_(part)).values(power_factor=power_factor)
        )
    return changed


def held_blocks(
    connection: Connection, quantity: str, month: int, keys: Sequence[int]
) -> dict[int, bytes]:
    """Return the blocks held of some series for one month: {series key: payload}."""
    held: dict[int, bytes] = {}
    for part in in_parts(keys):
        query = select(ReadingBlock.series_key, ReadingBlock.payload).where(
            ReadingBlock.series_key.in_(part),
            ReadingBlock.quantity == quantity,
            ReadingBlock.month == month,
        )
        held.update((row.series_key, row.payload) for row in connection.execute(query))
    return held


def any_block(connection: Connection, key: int) -> bytes | None:
    """Return one block of a series, to learn its step; None when there is none."""
    query = select(ReadingBlock.payload).where(ReadingBlock.series_key == key).limit(1)
    return connection.scalar(query)


def replace_blocks(
    connection: Connection,
    quantity: str,
    month: int,
    payloads: Mapping[int, bytes],
    held: Iterable[int],
) -> None:
    """Write blocks of one month, in place of those of the keys in `held`."""
    gone = [{"k": key} for key in held if key in payloads]
    if gone:
        connection.execute(
            delete(ReadingBlock).where(
                ReadingBlock.series_key == bindparam("k"),
                ReadingBlock.quantity == quantity,
                ReadingBlock.month == month,
            ),
            gone,
        )
    if payloads:
        connection.execute(
            insert(ReadingBlock),
            [
                {"series_key": key, "quantity": quantity, "month": month, "payload": payload}
                for key, payload in payloads.items()
            ],
        )


def superseded_block(
    connection: Connection, key: int, quantity: str, month: int, file_key: int
) -> bytes | None:
    """Return what a file has replaced so far in one block; None when nothing."""
    return connection.scalar(
        select(SupersededBlock.payload).where(
            SupersededBlock.series_key == key,
            SupersededBlock.quantity == quantity,
            SupersededBlock.month == month,
            SupersededBlock.replaced_by == file_key,
        )
    )


def keep_superseded(
    connection: Connection, key: int, quantity: str, month: int, file_key: int, payload: bytes
) -> None:
    """Remember what a file replaced in one block."""
    columns = {
        "series_key": key,
        "quantity": quantity,
        "month": month,
        "replaced_by": file_key,
    }
    connection.execute(
        delete(SupersededBlock).where(
            *(getattr(SupersededBlock, name) == value for name, value in columns.items())
        )
    )
    connection.execute(insert(SupersededBlock).values(payload=payload, **columns))


# --- What hangs on a site -------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class SiteMember:
    """A series that says something of a site's load, from a moment to a moment."""

    site_key: int
    series_key: int
    whole_site: bool  #: measured at the transformer, so it stands for all meters together
    starts_at: dt.datetime | None
    ends_at: dt.datetime | None
    multiplier: float
    power_factor: float | None


def site_members(connection: Connection, site_keys: Sequence[int]) -> list[SiteMember]:
    """Return all series of some sites, by site and then by name, so that sums are the same always."""
    members: list[tuple[str, SiteMember]] = []
    for part in in_parts(site_keys):
        meters = (
            select(
                MeterConnection.site_key,
                MeterConnection.meter_key,
                MeterConnection.starts_at,
                MeterConnection.ends_at,
                MeterConnection.multiplier,
                Series.power_factor,
                Series.name,
            )
            .join_from(MeterConnection, Series, MeterConnection.meter_key == Series.id)
            .where(MeterConnection.site_key.in_(part))
        )
        members += [
            (row.name, SiteMember(row[0], row[1], False, *row[2:6]))
            for row in connection.execute(meters)
        ]
        members += _measured_units(connection, part)
    members.sort(key=lambda named: (named[1].site_key, named[0], str(named[1].starts_at)))
    return [member for _, member in members]


def _measured_units(
    connection: Connection, site_keys: Sequence[int]
) -> list[tuple[str, SiteMember]]:
    query = (
        select(
            Placement.site_key,
            Series.id,
            Placement.starts_at,
            Placement.ends_at,
            Series.power_factor,
            Series.name,
        )
        .join_from(Placement, Unit, Placement.unit_key == Unit.id)
        .join(Series, (Series.kind == "unit") & (Series.name == Unit.unit_id))
        .where(Placement.site_key.in_(site_keys))
    )
    return [
        (row.name, SiteMember(row[0], row[1], True, row[2], row[3], 1.0, row.power_factor))
        for row in connection.execute(query)
    ]


def sites_of_series(connection: Connection, keys: Sequence[int]) -> dict[int, list[int]]:
    """Return the sites each series says something of, at any time: {series key: site keys}."""
    sites: dict[int, list[int]] = {}
    for part in in_parts(keys):
        by_meter = select(MeterConnection.meter_key, MeterConnection.site_key).where(
            MeterConnection.meter_key.in_(part)
        )
        by_unit = (
            select(Series.id, Placement.site_key)
            .join_from(Series, Unit, Series.name == Unit.unit_id)
            .join(Placement, Placement.unit_key == Unit.id)
            .where(Series.kind == "unit", Series.id.in_(part))
        )
        for query in (by_meter, by_unit):
            for series_key, site_key in connection.execute(query):
                sites.setdefault(series_key, []).append(site_key)
    return sites


def months_of_series(connection: Connection, keys: Sequence[int]) -> set[tuple[int, int]]:
    """Return every (series key, month) that readings are held of."""
    found: set[tuple[int, int]] = set()
    for part in in_parts(keys):
        query = (
            select(ReadingBlock.series_key, ReadingBlock.month)
            .where(ReadingBlock.series_key.in_(part))
            .distinct()
        )
        found.update((row.series_key, row.month) for row in connection.execute(query))
    return found


# --- Site load ------------------------------------------------------------------------------------


def replace_site_load(
    connection: Connection, month: int, payloads: Mapping[int, bytes | None]
) -> None:
    """Write the load of sites for one month; None takes away what was there."""
    keys = list(payloads)
    for part in in_parts(keys):
        connection.execute(
            delete(SiteLoadBlock).where(
                SiteLoadBlock.month == month, SiteLoadBlock.site_key.in_(part)
            )
        )
    rows = [
        {"site_key": key, "month": month, "payload": payload}
        for key, payload in payloads.items()
        if payload is not None
    ]
    if rows:
        connection.execute(insert(SiteLoadBlock), rows)


def site_load_months(connection: Connection) -> tuple[int, int] | None:
    """Return the first and last month that any site load is held of."""
    first, last = connection.execute(
        select(func.min(SiteLoadBlock.month), func.max(SiteLoadBlock.month))
    ).one()
    return None if first is None else (first, last)


def sites_of_month(connection: Connection, month: int) -> list[int]:
    """Return the sites whose load is held of a month."""
    query = select(SiteLoadBlock.site_key).where(SiteLoadBlock.month == month)
    return list(connection.scalars(query.order_by(SiteLoadBlock.site_key)))


def site_load_blocks(
    connection: Connection, site_keys: Sequence[int], months: tuple[int, int]
) -> Blocks:
    """Return the blocks of sites, both months included."""
    query = (
        select(SiteLoadBlock.site_key, SiteLoadBlock.month, SiteLoadBlock.payload)
        .where(SiteLoadBlock.month.between(*months))
        .order_by(SiteLoadBlock.site_key, SiteLoadBlock.month)
    )
    keys = sorted(site_keys)
    if keys and keys[-1] - keys[0] + 1 == len(keys):  # neighbours all: no need to name each
        named = [query.where(SiteLoadBlock.site_key.between(keys[0], keys[-1]))]
    else:
        named = [query.where(SiteLoadBlock.site_key.in_(part)) for part in in_parts(keys)]
    return Blocks.of([row for each in named for row in connection.execute(each).all()])


def series_blocks(
    connection: Connection, keys: Sequence[int], quantity: str, months: tuple[int, int]
) -> Blocks:
    """Return the blocks of one quantity of some series, both months included."""
    query = (
        select(ReadingBlock.series_key, ReadingBlock.month, ReadingBlock.payload)
        .where(ReadingBlock.quantity == quantity, ReadingBlock.month.between(*months))
        .order_by(ReadingBlock.series_key, ReadingBlock.month)
    )
    named = (query.where(ReadingBlock.series_key.in_(part)) for part in in_parts(sorted(keys)))
    return Blocks.of([row for each in named for row in connection.execute(each).all()])


def reading_months(connection: Connection) -> list[int]:
    """Return the months that any reading is held of."""
    return list(
        connection.scalars(select(ReadingBlock.month).distinct().order_by(ReadingBlock.month))
    )
