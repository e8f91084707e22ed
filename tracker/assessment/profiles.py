"""From the store's blocks to the arrays that the thermal model runs on.

Load belongs to the site and heat to the unit: a unit's load is that of the sites it stood at, while
it stood there. Arrays begin with the period's first interval; NaN marks a gap. Short gaps in air
temperatures are bridged by a straight line here; what is filled in loads was filled at intake.
"""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Callable, Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
import xxhash
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.errors import InputError
from tracker.fleet.nameplate import thermal_parameters
from tracker.settings import LONGEST_WEATHER_LINE_H
from tracker.store import fleet
from tracker.store import readings as held_readings
from tracker.store.blocks import (
    Blocks,
    FlagArray,
    Float32Array,
    month_of,
    month_start_s,
    unpack,
)
from tracker.store.fleet import Span, Stay
from tracker.store.keys import in_parts
from tracker.store.measured import ALL_MEASURED, MeasuredBlock, measured_blocks
from tracker.thermal.parameters import ThermalParameters

#: Units whose profiles are held in memory at a time.
UNITS_A_BATCH = 320

#: Sites looked at together to learn which part of a month is known.
SITES_LOOKED_AT = 256

WEATHER = "air_temp_c"


@dataclass(frozen=True, slots=True)
class Period:
    """From a moment to a moment, both on the hour [s since 1970, UTC]."""

    start_s: int
    end_s: int

    @classmethod
    def between(cls, starts_at: dt.datetime, ends_at: dt.datetime) -> Period:
        """Return the period between two moments."""
        return cls(int(starts_at.timestamp()), int(ends_at.timestamp()))

    @property
    def months(self) -> tuple[int, int]:
        """First and last month it touches."""
        return month_of(self.start_s), month_of(self.end_s - 1)

    @property
    def hours(self) -> float:
        """Its length [h]."""
        return (self.end_s - self.start_s) / 3600

    @property
    def starts_at(self) -> dt.datetime:
        """Its beginning."""
        return dt.datetime.fromtimestamp(self.start_s, dt.UTC)

    @property
    def ends_at(self) -> dt.datetime:
        """Its end, excluded."""
        return dt.datetime.fromtimestamp(self.end_s, dt.UTC)


@dataclass(frozen=True, slots=True)
class FleetPlan:
    """Who stood where in a period, and which weather held there."""

    period: Period
    units: Sequence[Mapping[str, Any]]  #: by unit id
    stays: Mapping[int, Sequence[Stay]]  #: placements in the period, by unit key
    station_of_site: Mapping[int, int | None]  #: series key; None where no station is known
    stations: Sequence[int]  #: series keys, the rows of the air temperatures


@dataclass(frozen=True, slots=True)
class Profiles:
    """Units of one step, ready for the thermal model."""

    unit_keys: list[int]
    site_keys: list[int | None]  #: where each unit stood last in the period
    expected_h: NDArray[np.float64]  #: hours of the period that each unit stood somewhere
    parameters: ThermalParameters
    load_kva: Float32Array  #: shape (n_unit, n_time)
    measured_rows: NDArray[np.intp]  #: units of whose load a part was not measured
    measured_share: NDArray[np.uint8]  #: of that load, shape (len(measured_rows), n_time) [1/200]
    air_temp_c: Float32Array  #: shape (n_station, n_time)
    air_filled: NDArray[np.bool_]  #: where a line bridges a gap, shape (n_station, n_time)
    station_index: NDArray[np.int64]
    step_min: int
    start_s: int


class Fingerprint:
    """A checksum of all data that figures were made from, of the blocks' own checksums."""

    def __init__(self) -> None:
        self._digest = xxhash.xxh3_128()

    def add_blocks(self, blocks: Blocks) -> None:
        """Take blocks in, by the checksums in their headers."""
        self._digest.update(blocks.headers)

    def add_measured(self, blocks: Sequence[MeasuredBlock]) -> None:
        """Take measured shares in."""
        for block in blocks:
            self._digest.update(block.share.tobytes())

    def add_text(self, text: str) -> None:
        """Take a nameplate or a placement in."""
        self._digest.update(text.encode())

    def __str__(self) -> str:
        return self._digest.hexdigest()


# --- The period -----------------------------------------------------------------------------------


def data_period(connection: Connection) -> Period:
    """Return the hours from the first known load of any site to the last.

    Raises
    ------
    InputError
        If no load is held at all.
    """
    months = held_readings.site_load_months(connection)
    if months is None:
        raise InputError(
            "the store holds no load of any site. Import units, connections and loads first."
        )
    first_s = min(start_s for start_s, _ in _known_spans(connection, months[0]))
    last_s = max(end_s for _, end_s in _known_spans(connection, months[1]))
    return Period(first_s // 3600 * 3600, -(-last_s // 3600) * 3600)


def _known_spans(connection: Connection, month: int) -> Iterator[tuple[int, int]]:
    """Yield from when to when some site's load is known in a month [s since 1970, UTC].

    Stops once the whole month is: a few sites tell, of however many.
    """
    month_s, next_s = month_start_s(month), month_start_s(month + 1)
    covered = (next_s, month_s)
    for part in in_parts(held_readings.sites_of_month(connection, month), SITES_LOOKED_AT):
        blocks = held_readings.site_load_blocks(connection, part, (month, month))
        for _, step_min, places in blocks.of_equal_length():
            flags = unpack([blocks.payload[place] for place in places.tolist()])[1]
            known = np.flatnonzero(flags.any(axis=0))
            span = (
                month_s + 60 * step_min * int(known[0]),
                month_s + 60 * step_min * int(known[-1] + 1),
            )
            covered = min(covered[0], span[0]), max(covered[1], span[1])
            yield span
        if covered == (month_s, next_s):
            return


def chosen_period(
    connection: Connection, starts_at: dt.datetime | None, ends_at: dt.datetime | None
) -> Period:
    """Return the period of all data, or the part of it between two moments.

    Raises
    ------
    InputError
        If nothing is left of it, or a moment is not on the hour.
    """
    held = data_period(connection)
    start_s = held.start_s if starts_at is None else max(held.start_s, _on_the_hour(starts_at))
    end_s = held.end_s if ends_at is None else min(held.end_s, _on_the_hour(ends_at))
    if start_s >= end_s:
        raise InputError(
            f"no load is held in the period asked for; the store holds {held.starts_at:%Y-%m-%d %H:%M} "
            f"to {held.ends_at:%Y-%m-%d %H:%M} UTC."
        )
    return Period(start_s, end_s)


def _on_the_hour(moment: dt.datetime) -> int:
    seconds = int(moment.timestamp())
    if seconds % 3600:
        raise InputError(f"{moment.isoformat()} is not on the hour in UTC. Name a full hour.")
    return seconds


# --- The plan -------------------------------------------------------------------------------------


def fleet_plan(
    connection: Connection, period: Period, unit_ids: Collection[str] | None = None
) -> FleetPlan:
    """Look up who stood where in a period; of some units, when they are named."""
    units = fleet.units(connection, unit_ids)
    keys = None if unit_ids is None else [unit["id"] for unit in units]
    whole = Span(period.starts_at, period.ends_at)
    stays: dict[int, list[Stay]] = {}
    for stay in fleet.placements(connection, keys):
        if stay.span.overlaps(whole):
            stays.setdefault(stay.who, []).append(stay)
    stations = fleet.stations(connection)
    only = next(iter(stations.values())) if len(stations) == 1 else None
    # A file without station ids holds the weather of all, whatever name the register gives it.
    nameless = stations.get("")
    station_of_site = {
        site: stations.get(name, nameless) if name else only
        for site, name in fleet.stations_named(connection).items()
    }
    return FleetPlan(period, units, stays, station_of_site, list(stations.values()))


# --- The profiles ---------------------------------------------------------------------------------


def profiles(connection: Connection, plan: FleetPlan) -> Iterator[Profiles]:
    """Yield the profiles of a fleet, a batch of units of one step at a time."""
    return (unpacked() for unpacked in packed_profiles(connection, plan, Fingerprint()))


def packed_profiles(
    connection: Connection, plan: FleetPlan, fingerprint: Fingerprint
) -> Iterator[Callable[[], Profiles]]:
    """Read the blocks of a fleet, a batch of units of one step at a time.

    Parameters
    ----------
    fingerprint : Fingerprint
        Takes in all data on the way.

    Yields
    ------
    callable
        Unpacks the batch; may be called in another thread, while the next batch is read.
    """
    weather = _Weather(connection, plan, fingerprint)
    for units in in_parts(plan.units, UNITS_A_BATCH):
        stays = [plan.stays.get(unit["id"], ()) for unit in units]
        stations = [[plan.station_of_site[stay.site_key] for stay in own] for own in stays]
        fingerprint.add_text(repr(([tuple(unit.values()) for unit in units], stays, stations)))
        yield from _batch(connection, plan, units, weather, fingerprint)


def _batch(
    connection: Connection,
    plan: FleetPlan,
    units: Sequence[Mapping[str, Any]],
    weather: _Weather,
    fingerprint: Fingerprint,
) -> Iterator[Callable[[], Profiles]]:
    sites = sorted({stay.site_key for unit in units for stay in plan.stays.get(unit["id"], ())})
    blocks = held_readings.site_load_blocks(connection, sites, plan.period.months)
    measured = measured_blocks(connection, sites, plan.period.months)
    fingerprint.add_blocks(blocks)
    fingerprint.add_measured(measured)
    site_step = steps_of(blocks)
    by_step: dict[int, list[Mapping[str, Any]]] = {}
    for unit in units:
        stays = plan.stays.get(unit["id"], ())
        steps = [site_step.get(stay.site_key, 0) for stay in stays]
        steps += [weather.step_of(plan.station_of_site[stay.site_key]) for stay in stays]
        by_step.setdefault(math.gcd(*steps) or 60, []).append(unit)
    for step_min, members in sorted(by_step.items()):
        yield partial(_profiles, plan, members, blocks, measured, weather, step_min)


def _profiles(
    plan: FleetPlan,
    units: Sequence[Mapping[str, Any]],
    blocks: Blocks,
    measured: Sequence[MeasuredBlock],
    weather: _Weather,
    step_min: int,
) -> Profiles:
    stays = [plan.stays.get(unit["id"], ()) for unit in units]
    site_of_row = [
        own[0].site_key if len(own) == 1 and _covers(own[0].span, plan.period) else None
        for own in stays
    ]
    load = np.empty((len(units), _n_time(plan.period, step_min)), dtype=np.float32)
    # A unit that stood at one site all the time is filled in place; others are pieced together.
    place = {site: row for row, site in enumerate(site_of_row) if site is not None}
    _fill(load, blocks, place, plan.period, step_min)
    pieced = [row for row, site in enumerate(site_of_row) if site is None and stays[row]]
    for row in pieced:
        _piece_together(load[row], stays[row], blocks, plan.period, step_min)
    air, filled, station_index = weather.of_units(plan, stays, step_min)
    return Profiles(
        [unit["id"] for unit in units],
        [own[-1].site_key if own else None for own in stays],
        np.array([_hours(own, plan.period) for own in stays]),
        thermal_parameters(fleet.nameplate(unit) for unit in units),
        load,
        *_measured_share(stays, measured, plan.period, step_min),
        air,
        filled,
        station_index,
        step_min,
        plan.period.start_s,
    )


def _n_time(period: Period, step_min: int) -> int:
    return (period.end_s - period.start_s) // (60 * step_min)


def _covers(span: Span, period: Period) -> bool:
    return (span.starts_at is None or span.starts_at <= period.starts_at) and (
        span.ends_at is None or span.ends_at >= period.ends_at
    )


def _part_of(span: Span, period: Period) -> tuple[int, int]:
    """Return the seconds of a period that a span covers: from, to."""
    start_s = int(span.starts_at.timestamp()) if span.starts_at else period.start_s
    end_s = int(span.ends_at.timestamp()) if span.ends_at else period.end_s
    return max(start_s, period.start_s), min(end_s, period.end_s)


def _hours(stays: Sequence[Stay], period: Period) -> float:
    parts = [_part_of(stay.span, period) for stay in stays]
    return sum(end_s - start_s for start_s, end_s in parts) / 3600


def steps_of(blocks: Blocks) -> dict[int, int]:
    """Return the finest step of each key [min]: {key: step}."""
    if not len(blocks):
        return {}
    keys, first = np.unique(blocks.key, return_index=True)
    steps = np.gcd.reduceat(blocks.step_min, first)
    return dict(zip(keys.tolist(), steps.tolist(), strict=True))


def unpacked_rows(
    blocks: Blocks, keys: Sequence[int], period: Period, step_min: int
) -> Float32Array:
    """Return the values of some series or sites over a period, one row a key.

    Returns
    -------
    values : float32, shape (len(keys), n_time)
        NaN where nothing is held. `step_min` must divide the step of every block.
    """
    room = np.empty((len(keys), _n_time(period, step_min)), dtype=np.float32)
    _fill(room, blocks, {key: row for row, key in enumerate(keys)}, period, step_min)
    return room


def _fill(
    room: Float32Array | FlagArray,
    blocks: Blocks,
    row_of: Mapping[int, int],
    period: Period,
    step_min: int,
) -> None:
    """Unpack blocks into the rows that `row_of` gives their keys.

    A room of floats takes the values, NaN where there is none; a room of bytes the flags, else 0.
    """
    step_s = 60 * step_min
    flags = int(room.dtype == np.uint8)
    rows = np.array([row_of.get(key, -1) for key in blocks.key.tolist()], dtype=np.intp)
    n_filled = np.bincount(
        blocks.month[rows >= 0] - period.months[0],
        minlength=period.months[1] - period.months[0] + 1,
    )
    for month, n_row in enumerate(n_filled.tolist(), start=period.months[0]):
        if n_row < len(room):
            start, stop, _ = _places(month, period, step_s, room.shape[1])
            room[:, start:stop] = 0 if flags else np.nan
    for month, own_step_min, places in blocks.of_equal_length():
        chosen = places[rows[places] >= 0]
        if not len(chosen):
            continue
        values: NDArray[Any] = unpack([blocks.payload[place] for place in chosen.tolist()])[flags]
        times = own_step_min // step_min
        if times > 1:
            values = np.repeat(values, times, axis=1)
        start, stop, first = _places(month, period, step_s, room.shape[1])
        room[rows[chosen], start:stop] = values[:, start - first : stop - first]


def _places(month: int, period: Period, step_s: int, n_time: int) -> tuple[int, int, int]:
    """Return where a month's part of the period starts and stops, and where the month would start."""
    first = (month_start_s(month) - period.start_s) // step_s
    after = (month_start_s(month + 1) - period.start_s) // step_s
    return max(first, 0), min(after, n_time), first


def _piece_together(
    load: Float32Array | FlagArray,
    stays: Sequence[Stay],
    blocks: Blocks,
    period: Period,
    step_min: int,
) -> None:
    """Put the load of each site where the unit stood there."""
    for stay in stays:
        whole = np.empty((1, len(load)), dtype=load.dtype)
        _fill(whole, blocks, {stay.site_key: 0}, period, step_min)
        part = _places_of(stay, period, step_min)
        load[part] = whole[0, part]


def _places_of(stay: Stay, period: Period, step_min: int) -> slice:
    """Return the places of a period that a stay covers."""
    start_s, end_s = _part_of(stay.span, period)
    step_s = 60 * step_min
    return slice(-(-(start_s - period.start_s) // step_s), -(-(end_s - period.start_s) // step_s))


def _measured_share(
    stays: Sequence[Sequence[Stay]],
    measured: Sequence[MeasuredBlock],
    period: Period,
    step_min: int,
) -> tuple[NDArray[np.intp], NDArray[np.uint8]]:
    """Return the units of whose load a part was not measured, and how much was, place by place."""
    of_site: dict[int, list[MeasuredBlock]] = {}
    for block in measured:
        of_site.setdefault(block.site_key, []).append(block)
    rows = [row for row, own in enumerate(stays) if any(stay.site_key in of_site for stay in own)]
    n_time = _n_time(period, step_min)
    share = np.full((len(rows), n_time), ALL_MEASURED, dtype=np.uint8)
    for place, row in enumerate(rows):
        for stay in stays[row]:
            stood = _places_of(stay, period, step_min)
            for block in of_site.get(stay.site_key, ()):
                times = block.step_min // step_min
                own = np.repeat(block.share, times) if times > 1 else block.share
                start, stop, first = _places(block.month, period, 60 * step_min, n_time)
                start, stop = max(start, stood.start), min(stop, stood.stop)
                if start < stop:
                    share[place, start:stop] = own[start - first : stop - first]
    return np.array(rows, dtype=np.intp), share


def load_flags(connection: Connection, plan: FleetPlan, step_min: int) -> FlagArray:
    """Return what is known of the loads of a plan's units beyond their size.

    Returns
    -------
    flags : uint8, shape (n_unit, n_time)
        See `Quality`; 0 where no load is held.
    """
    flags = np.zeros((len(plan.units), _n_time(plan.period, step_min)), dtype=np.uint8)
    stays = [plan.stays.get(unit["id"], ()) for unit in plan.units]
    sites = sorted({stay.site_key for own in stays for stay in own})
    blocks = held_readings.site_load_blocks(connection, sites, plan.period.months)
    for row, own in enumerate(stays):
        _piece_together(flags[row], own, blocks, plan.period, step_min)
    return flags


class _Weather:
    """Air temperatures of all stations of a plan, at any step."""

    def __init__(self, connection: Connection, plan: FleetPlan, fingerprint: Fingerprint) -> None:
        # A gap at an edge of the period is bridged from the readings beyond it.
        margin_s = 3600 * (math.ceil(LONGEST_WEATHER_LINE_H) + 1)
        self._period = plan.period
        self._looked_at = Period(plan.period.start_s - margin_s, plan.period.end_s + margin_s)
        self._blocks = held_readings.series_blocks(
            connection, plan.stations, WEATHER, self._looked_at.months
        )
        fingerprint.add_blocks(self._blocks)
        self._row_of = {station: row for row, station in enumerate(plan.stations)}
        self._steps = steps_of(self._blocks)
        self._made: dict[int, tuple[Float32Array, NDArray[np.bool_]]] = {}

    def step_of(self, station: int | None) -> int:
        """Return the step of a station [min]; 0 where nothing is known of it."""
        return 0 if station is None else self._steps.get(station, 0)

    def _air(self, step_min: int) -> tuple[Float32Array, NDArray[np.bool_]]:
        """Return all stations at a step, where they are bridged, and a last row without any."""
        if step_min not in self._made:
            shape = (len(self._row_of) + 1, _n_time(self._period, step_min))
            air = np.full(shape, np.nan, dtype=np.float32)
            filled = np.zeros(shape, dtype=np.bool_)
            for own_step_min in set(self._steps.values()):
                if own_step_min % step_min == 0:
                    stations = [key for key, step in self._steps.items() if step == own_step_min]
                    rows = [self._row_of[station] for station in stations]
                    air[rows], filled[rows] = self._bridged(stations, own_step_min, step_min)
            self._made[step_min] = air, filled
        return self._made[step_min]

    def _bridged(
        self, stations: Sequence[int], own_step_min: int, step_min: int
    ) -> tuple[Float32Array, NDArray[np.bool_]]:
        """Return stations of one step, at a finer one; the line is drawn at their own."""
        known = np.empty((len(stations), _n_time(self._looked_at, own_step_min)), dtype=np.float32)
        rows = {station: row for row, station in enumerate(stations)}
        _fill(known, self._blocks, rows, self._looked_at, own_step_min)
        air = np.stack([bridged(row, _longest_gap(own_step_min)) for row in known])
        first = (self._period.start_s - self._looked_at.start_s) // (60 * step_min)
        part = slice(first, first + _n_time(self._period, step_min))
        times = own_step_min // step_min
        filled = np.isfinite(air) & np.isnan(known)
        return np.repeat(air, times, axis=1)[:, part], np.repeat(filled, times, axis=1)[:, part]

    def of_units(
        self, plan: FleetPlan, stays: Sequence[Sequence[Stay]], step_min: int
    ) -> tuple[Float32Array, NDArray[np.bool_], NDArray[np.int64]]:
        """Return air temperatures, where they are bridged, and the row of each unit."""
        air, filled = self._air(step_min)
        nowhere = len(self._row_of)
        index = np.full(len(stays), nowhere, dtype=np.int64)
        moved: list[tuple[Sequence[Stay], Sequence[int]]] = []
        for row, own in enumerate(stays):
            stations = [plan.station_of_site[stay.site_key] for stay in own]
            rows = [nowhere if each is None else self._row_of[each] for each in stations]
            if len(set(rows)) == 1:
                index[row] = rows[0]
            elif rows:  # the unit moved from one station's weather into another's
                index[row] = len(air) + len(moved)
                moved.append((own, rows))
        if moved:
            air = np.vstack([air, *(self._pieced(air, *each, step_min) for each in moved)])
            filled = np.vstack([filled, *(self._pieced(filled, *each, step_min) for each in moved)])
        return air, filled, index

    def _pieced(
        self, of_stations: NDArray[Any], stays: Sequence[Stay], rows: Sequence[int], step_min: int
    ) -> NDArray[Any]:
        """Return the last row, of nothing known, with the part of each stay's station in it."""
        pieced: NDArray[Any] = of_stations[len(self._row_of)].copy()
        for stay, row in zip(stays, rows, strict=True):
            part = _places_of(stay, self._period, step_min)
            pieced[part] = of_stations[row, part]
        return pieced


def _longest_gap(step_min: int) -> int:
    return int(60 * LONGEST_WEATHER_LINE_H) // step_min


def bridged(values: Float32Array, longest: int) -> Float32Array:
    """Return a series whose short gaps are filled by a straight line between their neighbours.

    Parameters
    ----------
    values : float32, shape (n_time,)
        NaN marks a gap.
    longest : int
        Places that a gap may have to be filled; a longer one, and one at an end, stays a gap.

    Examples
    --------
    >>> series = np.array([20, np.nan, np.nan, 26, np.nan, np.nan, np.nan, 20, np.nan], np.float32)
    >>> bridged(series, 2).tolist()
    [20.0, 22.0, 24.0, 26.0, nan, nan, nan, 20.0, nan]
    """
    known = np.flatnonzero(np.isfinite(values))
    gap = np.diff(known) - 1
    filled = values.copy()
    for before, length in zip(known[:-1][gap > 0].tolist(), gap[gap > 0].tolist(), strict=True):
        if length <= longest:
            after = before + length + 1
            line = np.linspace(values[before], values[after], length + 2)
            filled[before + 1 : after] = line[1:-1]
    return filled
