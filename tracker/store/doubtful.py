"""Which meter hangs where at one moment, and whether it may have changed; SQL only."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

from sqlalchemy import Connection, func, or_, select

from tracker.store.models import IntakeFile, MeterConnection, Placement, Series, Unit


@dataclass(frozen=True, slots=True)
class ConnectedMeter:
    """A meter at a site, as the store has it."""

    key: int  #: of its series
    meter_id: str
    site_key: int
    starts_at: dt.datetime | None


def connected_meters(connection: Connection, at: dt.datetime) -> list[ConnectedMeter]:
    """Return all meters connected at a moment, by site and meter id."""
    query = (
        select(
            MeterConnection.meter_key,
            Series.name,
            MeterConnection.site_key,
            MeterConnection.starts_at,
        )
        .join_from(MeterConnection, Series, MeterConnection.meter_key == Series.id)
        .where(
            or_(MeterConnection.starts_at.is_(None), MeterConnection.starts_at <= at),
            or_(MeterConnection.ends_at.is_(None), MeterConnection.ends_at > at),
        )
        .order_by(MeterConnection.site_key, Series.name)
    )
    return [ConnectedMeter(*row) for row in connection.execute(query)]


def sites_measured_whole(connection: Connection) -> set[int]:
    """Return the sites where a unit measured as a whole has stood: no sum of meters says their load."""
    query = (
        select(Placement.site_key)
        .join_from(Placement, Unit, Placement.unit_key == Unit.id)
        .join(Series, (Series.kind == "unit") & (Series.name == Unit.unit_id))
        .distinct()
    )
    return set(connection.scalars(query))


def newest_file(connection: Connection) -> int | None:
    """Return the key of the file taken in last: while it stays, so does all that the store holds."""
    return connection.scalar(select(func.max(IntakeFile.id)))
