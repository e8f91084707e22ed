"""What hangs on a site: meters, units measured as a whole, the units that stand there; SQL only."""

from __future__ import annotations

import datetime as dt
from collections.abc import Collection, Sequence
from dataclasses import dataclass

from sqlalchemy import Connection, func, select

from tracker.store import readings as held_readings
from tracker.store.keys import among, in_parts
from tracker.store.models import (
    MeterConnection,
    Placement,
    ReadingBlock,
    Series,
    Site,
    SiteLoadBlock,
    SpreadBlock,
    Unit,
    UnmeteredLoad,
)

#: Hours in which unmetered load burns.
ALWAYS, DUSK_TO_DAWN = "always", "dusk to dawn"


@dataclass(frozen=True, slots=True)
class SiteMember:
    """A series that says something of a site's load, from a moment to a moment."""

    site_key: int
    series_key: int
    name: str
    whole_site: bool  #: measured at the transformer, so it stands for all meters together
    starts_at: dt.datetime | None
    ends_at: dt.datetime | None
    multiplier: float
    power_factor: float | None  #: the connection's, else the series'


@dataclass(frozen=True, slots=True)
class StandingUnit:
    """A unit at a site, from a moment to a moment."""

    site_key: int
    starts_at: dt.datetime | None
    ends_at: dt.datetime | None
    rated_kva: float
    phases: int
    hv_volts: float | None
    lv_volts: float | None


@dataclass(frozen=True, slots=True)
class Unmetered:
    """Load at a site that no meter reads."""

    site_key: int
    always_kw: float
    dusk_to_dawn_kw: float
    latitude: float | None
    longitude: float | None


def site_members(connection: Connection, site_keys: Sequence[int]) -> list[SiteMember]:
    """Return all series of some sites, by site and then by name, so that sums are the same always."""
    members: list[SiteMember] = []
    for part in in_parts(sorted(site_keys)):
        meters = (
            select(
                MeterConnection.site_key,
                MeterConnection.meter_key,
                Series.name,
                MeterConnection.starts_at,
                MeterConnection.ends_at,
                MeterConnection.multiplier,
                func.coalesce(MeterConnection.power_factor, Series.power_factor),
            )
            .join_from(MeterConnection, Series, MeterConnection.meter_key == Series.id)
            .where(among(MeterConnection.site_key, part))
        )
        for site, series, name, starts_at, ends_at, multiplier, power_factor in connection.execute(
            meters
        ):
            members.append(
                SiteMember(site, series, name, False, starts_at, ends_at, multiplier, power_factor)
            )
        units = (
            select(
                Placement.site_key,
                Series.id,
                Series.name,
                Placement.starts_at,
                Placement.ends_at,
                Series.power_factor,
            )
            .join_from(Placement, Unit, Placement.unit_key == Unit.id)
            .join(Series, (Series.kind == "unit") & (Series.name == Unit.unit_id))
            .where(among(Placement.site_key, part))
        )
        members += [
            SiteMember(row[0], row[1], row[2], True, row[3], row[4], 1.0, row[5])
            for row in connection.execute(units)
        ]
    members.sort(
        key=lambda member: (
            member.site_key,
            member.name,
            member.whole_site,
            "" if member.starts_at is None else member.starts_at.isoformat(),
        )
    )
    return members


def standing_units(connection: Connection, site_keys: Sequence[int]) -> list[StandingUnit]:
    """Return all units that stand or stood at some sites."""
    found: list[StandingUnit] = []
    for part in in_parts(sorted(site_keys)):
        query = (
            select(
                Placement.site_key,
                Placement.starts_at,
                Placement.ends_at,
                Unit.rated_kva,
                func.coalesce(Unit.phases, 1),
                Unit.hv_volts,
                Unit.lv_volts,
            )
            .join_from(Placement, Unit, Placement.unit_key == Unit.id)
            .where(among(Placement.site_key, part))
        )
        found += [StandingUnit(*row) for row in connection.execute(query)]
    return found


def unmetered(connection: Connection, site_keys: Sequence[int]) -> list[Unmetered]:
    """Return the unmetered load of those sites that have any."""
    found: dict[int, dict[str, float]] = {}
    places: dict[int, tuple[float | None, float | None]] = {}
    for part in in_parts(sorted(site_keys)):
        query = (
            select(
                UnmeteredLoad.site_key,
                UnmeteredLoad.hours,
                UnmeteredLoad.kw,
                Site.latitude,
                Site.longitude,
            )
            .join_from(UnmeteredLoad, Site, UnmeteredLoad.site_key == Site.id)
            .where(among(UnmeteredLoad.site_key, part), UnmeteredLoad.replaced_by.is_(None))
        )
        for site, hours, kw, latitude, longitude in connection.execute(query):
            found.setdefault(site, {})[hours] = kw
            places[site] = latitude, longitude
    return [
        Unmetered(site, kw.get(ALWAYS, 0.0), kw.get(DUSK_TO_DAWN, 0.0), *places[site])
        for site, kw in found.items()
    ]


# --- Months whose load must be looked at ----------------------------------------------------------


def months_of_sites(connection: Connection, site_keys: Collection[int]) -> set[tuple[int, int]]:
    """Return every (site key, month) that load is held of, or could be derived for."""
    found: set[tuple[int, int]] = set()
    lit: list[int] = []
    for part in in_parts(sorted(site_keys)):
        meters = among(MeterConnection.site_key, part)
        sources = [
            select(MeterConnection.site_key, table.month)
            .join_from(MeterConnection, table, table.series_key == MeterConnection.meter_key)
            .where(meters)
            for table in (ReadingBlock, SpreadBlock)
        ]
        sources += [
            select(Placement.site_key, ReadingBlock.month)
            .join_from(Placement, Unit, Placement.unit_key == Unit.id)
            .join(Series, (Series.kind == "unit") & (Series.name == Unit.unit_id))
            .join(ReadingBlock, ReadingBlock.series_key == Series.id)
            .where(among(Placement.site_key, part)),
            select(SiteLoadBlock.site_key, SiteLoadBlock.month).where(
                among(SiteLoadBlock.site_key, part)
            ),
        ]
        for query in sources:
            found.update((row[0], row[1]) for row in connection.execute(query.distinct()))
        unmetered_sites = select(UnmeteredLoad.site_key).where(
            among(UnmeteredLoad.site_key, part), UnmeteredLoad.replaced_by.is_(None)
        )
        lit += connection.scalars(unmetered_sites.distinct())
    if lit:
        months = held_readings.load_months(connection)
        found.update((site, month) for site in lit for month in months)
    return found


def unlit(connection: Connection, months: Collection[int]) -> set[tuple[int, int]]:
    """Return the (site key, month) that have unmetered load but no load derived yet."""
    found: set[tuple[int, int]] = set()
    sites = select(UnmeteredLoad.site_key).where(UnmeteredLoad.replaced_by.is_(None)).distinct()
    for month in months:
        known = select(SiteLoadBlock.site_key).where(SiteLoadBlock.month == month)
        query = sites.where(UnmeteredLoad.site_key.not_in(known))
        found.update((site, month) for site in connection.scalars(query))
    return found


def not_all_measured(
    connection: Connection, site_months: Collection[tuple[int, int]]
) -> set[tuple[int, int]]:
    """Return those of the (site key, month) whose load was not measured whole."""
    found: set[tuple[int, int]] = set()
    by_month: dict[int, list[int]] = {}
    for site, month in site_months:
        by_month.setdefault(month, []).append(site)
    for month, sites in by_month.items():
        for part in in_parts(sorted(sites)):
            query = select(SiteLoadBlock.site_key).where(
                SiteLoadBlock.month == month,
                among(SiteLoadBlock.site_key, part),
                SiteLoadBlock.measured.is_not(None),
            )
            found.update((site, month) for site in connection.scalars(query))
    return found
