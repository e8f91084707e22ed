"""Each unit as it stands now: its load since, and the meters that hang there."""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.assessment.profiles import Period, Profiles, data_period, fleet_plan, profiles
from tracker.planning.doubt_settings import DoubtSettings
from tracker.store import fleet
from tracker.store.blocks import Float32Array
from tracker.store.doubtful import ConnectedMeter, connected_meters, sites_measured_whole

DAY_S = 86_400


@dataclass(frozen=True, slots=True)
class Overload:
    """How long a unit carried what none carries for long."""

    days: int = 0  #: UTC days with so many hours of it
    most_h: float = 0.0  #: on the worst of them [h]
    worst_day: dt.date | None = None


@dataclass(frozen=True, slots=True)
class Place:
    """A unit at its site: what the register says, and what the load was while it stood there."""

    unit_id: str
    site_id: str
    site_key: int
    feeder: str | None
    rated_kva: float
    customers: int | None
    latitude: float | None
    longitude: float | None
    starts_at: dt.datetime | None  #: of the unit at this site
    meters: tuple[ConnectedMeter, ...]
    measured_whole: bool  #: load read at the unit, not summed over meters
    known_h: float  #: hours whose load is known
    peak_kva: float  #: load exceeded in a small share of those hours; NaN where none is known
    mean_kva: float
    overload: Overload

    @property
    def peak_pu(self) -> float:
        """Peak load over the rating."""
        return self.peak_kva / self.rated_kva

    @property
    def meters_per_kva(self) -> float:
        """Connected meters over the rating."""
        return len(self.meters) / self.rated_kva


def load_exceeded(load_kva: NDArray[np.floating[Any]], share: float) -> float:
    """Return the load that is exceeded in a share of the known intervals; NaN where none is known.

    A peak that no single wrong reading decides.

    Examples
    --------
    >>> load_exceeded(np.array([1.0, 2.0, np.nan, 3.0, 99.0]), 0.25)
    3.0
    """
    known = load_kva[np.isfinite(load_kva)]
    if not known.size:
        return math.nan
    place = math.floor((1.0 - share) * (known.size - 1))
    return float(np.partition(known, place)[place])


def current_places(connection: Connection, settings: DoubtSettings) -> tuple[Period, list[Place]]:
    """Return the units that stand somewhere at the end of the data, by unit id, and the time looked at.

    Raises
    ------
    InputError
        If no load is held at all.
    """
    held = data_period(connection)
    period = Period(max(held.start_s, held.end_s - settings.days * DAY_S), held.end_s)
    plan = fleet_plan(connection, period)
    meters: dict[int, list[ConnectedMeter]] = {}
    for meter in connected_meters(connection, period.ends_at - dt.timedelta(seconds=1)):
        meters.setdefault(meter.site_key, []).append(meter)
    sites = {site["id"]: site for site in fleet.sites(connection)}
    whole = sites_measured_whole(connection)
    removed = fleet.removed_units(connection)
    units = {unit["id"]: unit for unit in plan.units}
    places = []
    for batch in profiles(connection, plan):
        for row, key, site_key in _standing(batch, units, removed):
            site, load_kva = sites[site_key], batch.load_kva[row]
            stay = plan.stays[key][-1]
            known_h = np.count_nonzero(np.isfinite(load_kva)) * batch.step_min / 60
            places.append(
                Place(
                    unit_id=units[key]["unit_id"],
                    site_id=site["site_id"],
                    site_key=site_key,
                    feeder=site["feeder"],
                    rated_kva=units[key]["rated_kva"],
                    customers=site["customers"],
                    latitude=site["latitude"],
                    longitude=site["longitude"],
                    starts_at=stay.span.starts_at,
                    meters=tuple(meters.get(site_key, ())),
                    measured_whole=site_key in whole,
                    known_h=known_h,
                    peak_kva=load_exceeded(load_kva, settings.peak_share),
                    mean_kva=float(np.nanmean(load_kva)) if known_h else math.nan,
                    overload=_overload(load_kva, units[key]["rated_kva"], batch, settings),
                )
            )
    return period, sorted(places, key=lambda place: place.unit_id)


def _standing(
    batch: Profiles, units: Mapping[int, Mapping[str, Any]], removed: Mapping[str, Any]
) -> Iterator[tuple[int, int, int]]:
    """Yield row, unit key and site key of the units that were not taken away."""
    for row, (key, site_key) in enumerate(zip(batch.unit_keys, batch.site_keys, strict=True)):
        if site_key is not None and units[key]["unit_id"] not in removed:
            yield row, key, site_key


def _overload(
    load_kva: Float32Array, rated_kva: float, batch: Profiles, settings: DoubtSettings
) -> Overload:
    """Count the UTC days with so many hours of a load that no unit carries for long."""
    over = load_kva > settings.impossible_pct / 100 * rated_kva
    if not over.any():
        return Overload()
    first_day = batch.start_s // DAY_S
    day = (batch.start_s + 60 * batch.step_min * np.flatnonzero(over)) // DAY_S - first_day
    hours = np.bincount(day) * batch.step_min / 60
    worst = int(np.argmax(hours))
    return Overload(
        int(np.count_nonzero(hours >= settings.impossible_h)),
        float(hours[worst]),
        dt.datetime.fromtimestamp((first_day + worst) * DAY_S, dt.UTC).date(),
    )
