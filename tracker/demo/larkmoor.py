"""Larkmoor Rural Electric District: an invented utility that writes its files as a real one would.

Everything here is invented: the district, its units, meters, customers, loads and weather; any
likeness is chance. A small rural utility in a continental place with hot summers: four feeders,
240 transformers, mostly single-phase on poles, and about 1,300 hourly meters. In its year, 2025:

- fronts of several days cross the plain, and from 13 to 21 July a heat wave brings afternoons of
  40 to 42 °C;
- cars come to more and more homes and charge in the evening; in one street on Saltmarsh, to all;
- roofs export at noon, and one street then loads its unit backwards;
- irrigation pumps on Orchard run for days on end in the dry weeks; a school is empty just then; a
  quarry works one shift;
- two meters are written down at each other's transformer, a shop's and a home's;
- one overloaded unit is exchanged for a larger one in the middle of the heat wave;
- some meters never report, others are out for hours or days;
- for a few units there is a test sheet, for most hardly more than the rating.

The world runs from 1 January 2025 to the end of 2028 and does not depend on how much of it is
written: fewer units or days are a cut of the same district. `python -m tracker.demo FOLDER` writes
the sample that comes with the sources.
"""

from __future__ import annotations

import datetime as dt
import os
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, fields
from functools import partial
from itertools import islice
from pathlib import Path

import numpy as np

from tracker.demo.clock import FIRST_DAY, LAST_DAY, TIME_ZONE, Clock, FloatArray
from tracker.demo.customers import Home, customer_kw
from tracker.demo.district import EXCHANGE_DAY, Meter, Site, UnitRow, plan_district
from tracker.demo.files import (
    LOADS_HEADING,
    WEATHER_HEADING,
    gzipped,
    reading_rows,
    write_table,
)
from tracker.demo.weather import HEAT_WAVE_DAY, Sky, draw_sky
from tracker.errors import InputError

STEPS_MINUTES = (5, 10, 15, 20, 30, 60)
_READINGS_A_BATCH = 1_000_000  # held in memory by a thread

OnProgress = Callable[[str, float], None]


@dataclass(frozen=True, slots=True)
class LarkmoorFiles:
    """What was written, and what is true about it, which the utility does not know."""

    units: Path
    connections: Path
    loads: tuple[Path, ...]
    weather: Path
    timezone: str  #: IANA name; the stamps in the files are UTC
    first_day: dt.date  #: local
    last_day: dt.date  #: local, included
    n_meter: int
    n_reading: int
    miswired_meters: tuple[str, ...]  #: written down at each other's site
    missing_meters: tuple[str, ...]  #: connected, but never read
    interrupted_meters: tuple[str, ...]  #: with gaps in their readings
    charging_meters: tuple[str, ...]  #: homes with a car by the last day
    solar_meters: tuple[str, ...]
    exchanged_units: tuple[str, str] | None  #: old and new unit
    exchanged_on: dt.date


def write_larkmoor(
    folder: Path,
    *,
    units: int = 240,
    days: int = 365,
    start: dt.date | None = None,
    random_state: int = 11,
    step_minutes: int = 60,
    one_loads_file: bool = False,
    on_progress: OnProgress | None = None,
) -> LarkmoorFiles:
    """Write the files of the invented utility into a folder; files of the same names are replaced.

    Parameters
    ----------
    folder : Path
        Made where it does not exist.
    units : int
        Places where a transformer stands, 1 to 100,000; the exchanged one has a row more.
    days : int
        Local days of readings, 2 to 1,100.
    start : date, optional
        First local day. Default: 1 January 2025 for a year or more; fewer days lie around the heat
        wave of July.
    random_state : int
        The same state gives the same files.
    step_minutes : int
        Length of an interval, one of `STEPS_MINUTES`.
    one_loads_file : bool
        One `loads.csv.gz` instead of a file a month, `loads_2025-07.csv.gz`.
    on_progress : callable, optional
        Called with what is being done and the share done, 0 to 1.

    Raises
    ------
    InputError
        A figure is out of its range, or the folder cannot be written.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     files = write_larkmoor(Path(folder), units=6, days=5)
    ...     print(files.units.read_text().splitlines()[1][:42])
    ...     print([path.name for path in files.loads], files.first_day)
    LK-11-0047,S-11-0047,LK-11 Saltmarsh,25,,,
    ['loads_2025-07.csv.gz'] 2025-07-15
    """
    clock = _clock(units, days, start, random_state, step_minutes)
    report = on_progress or (lambda _what, _share: None)
    report("Planning the district", 0.0)
    sites = plan_district(units, random_state)
    sky = draw_sky(clock, np.random.default_rng((random_state, 0)))
    try:
        folder.mkdir(parents=True, exist_ok=True)
        units_path = folder / "units.csv"
        headings = [field.name for field in fields(UnitRow)]
        write_table(
            units_path,
            headings,
            ([getattr(row, name) for name in headings] for site in sites for row in site.units),
        )
        connections_path = folder / "connections.csv"
        write_table(
            connections_path,
            ("meter_id", "site_id", "starts_on", "ends_on", "multiplier"),
            (
                (meter.meter_id, meter.recorded_site_id, meter.starts_on, None, meter.multiplier)
                for site in sites
                for meter in site.meters
            ),
        )
        weather_path = folder / "weather.csv"
        _write_weather(weather_path, clock, sky)
        loads_paths, n_reading = _write_loads(
            folder, sites, clock, sky, random_state, one_file=one_loads_file, report=report
        )
    except OSError as error:
        raise InputError(
            f"folder = {folder} cannot be written ({error.strerror}). Choose another folder."
        ) from error

    meters = [meter for site in sites for meter in site.meters]
    exchanged = [site.units for site in sites if len(site.units) == 2]
    return LarkmoorFiles(
        units=units_path,
        connections=connections_path,
        loads=tuple(loads_paths),
        weather=weather_path,
        timezone=TIME_ZONE,
        first_day=clock.first_day,
        last_day=clock.last_day,
        n_meter=len(meters),
        n_reading=n_reading,
        miswired_meters=tuple(
            meter.meter_id
            for site in sites
            for meter in site.meters
            if meter.recorded_site_id != site.units[0].site_id
        ),
        missing_meters=tuple(meter.meter_id for meter in meters if not meter.reads),
        interrupted_meters=tuple(
            meter.meter_id for meter in meters if meter.reads and any(_steps_out(meter, clock))
        ),
        charging_meters=tuple(
            meter.meter_id
            for meter in meters
            if isinstance(meter.customer, Home)
            and meter.customer.charging_from_day is not None
            and meter.customer.charging_from_day < clock.n_day
        ),
        solar_meters=tuple(
            meter.meter_id
            for meter in meters
            if isinstance(meter.customer, Home) and meter.customer.solar_kw > 0
        ),
        exchanged_units=(exchanged[0][0].unit_id, exchanged[0][1].unit_id) if exchanged else None,
        exchanged_on=EXCHANGE_DAY,
    )


def write_sample(folder: Path) -> LarkmoorFiles:
    """Write the sample that comes with the sources: 24 units, four weeks around the heat wave."""
    return write_larkmoor(folder, units=24, days=28, one_loads_file=True)


def _clock(
    units: int, days: int, start: dt.date | None, random_state: int, step_minutes: int
) -> Clock:
    """Check the figures and return the clock they ask for."""
    for name, value, unit, low, high in (
        ("units", units, "transformers", 1, 100_000),
        ("days", days, "days", 2, 1_100),
        ("random_state", random_state, "", 0, 2**32 - 1),
    ):
        if not low <= value <= high:
            raise InputError(
                f"{name} = {value}{unit and ' ' + unit} is out of range; "
                f"allowed {low} to {high:,}. Choose a number between them."
            )
    if step_minutes not in STEPS_MINUTES:
        raise InputError(
            f"step_minutes = {step_minutes} min is no usual interval; "
            f"allowed {', '.join(map(str, STEPS_MINUTES))}. Choose one of them."
        )
    if start is None:
        start = FIRST_DAY if days >= 365 else HEAT_WAVE_DAY - dt.timedelta(days=days // 2)
    last_day = start + dt.timedelta(days=days - 1)
    if start < FIRST_DAY or last_day > LAST_DAY:
        raise InputError(
            f"start = {start} with {days} days is out of the invented years; "
            f"allowed {FIRST_DAY} to {LAST_DAY}. Choose another start or fewer days."
        )
    return Clock(start, last_day, step_minutes)


def _write_weather(path: Path, clock: Clock, sky: Sky) -> None:
    """Write hourly air temperatures of all stations, whatever the interval of the meters."""
    hourly = clock.window.start + np.flatnonzero(
        clock.stamps_utc[clock.window].astype(np.int64) % 60 == 0
    )
    air_c = np.stack([series[hourly] for series in sky.air_c.values()])
    rows = reading_rows(list(sky.air_c), clock.stamps_utc[hourly], air_c, decimals=1)
    path.write_bytes(WEATHER_HEADING + rows)


def _write_loads(
    folder: Path,
    sites: list[Site],
    clock: Clock,
    sky: Sky,
    random_state: int,
    *,
    one_file: bool,
    report: OnProgress,
) -> tuple[list[Path], int]:
    """Write the readings, a batch of sites after another; return the files and the readings."""
    months = clock.month[clock.window]
    names = np.full_like(months, "loads") if one_file else np.char.add("loads_", months)
    parts = {
        folder / f"{name}.csv.gz": slice(
            clock.window.start + int(np.searchsorted(names, name)),
            clock.window.start + int(np.searchsorted(names, name, side="right")),
        )
        for name in np.unique(names)
    }
    for path in parts:
        path.write_bytes(gzipped(LOADS_HEADING))
    n_worker = os.cpu_count() or 1
    n_site, n_reading = 0, 0
    packed = partial(
        _packed_readings, clock=clock, sky=sky, steps=list(parts.values()), state=random_state
    )
    with ThreadPoolExecutor(n_worker) as workers:
        batches = _site_batches(sites, clock.n_step)
        while group := list(islice(batches, n_worker)):
            for members, n_new in workers.map(packed, group):
                for path, member in zip(parts, members, strict=True):
                    with path.open("ab") as file:
                        file.write(member)
                n_reading += n_new
            n_site += sum(len(batch) for batch in group)
            report("Reading the meters", n_site / len(sites))
    return list(parts), n_reading


def _site_batches(sites: list[Site], n_step: int) -> Iterator[list[Site]]:
    """Yield batches of sites of which the readings fit well into memory."""
    batch: list[Site] = []
    for site in sites:
        batch.append(site)
        if sum(len(site.meters) for site in batch) * n_step >= _READINGS_A_BATCH:
            yield batch
            batch = []
    if batch:
        yield batch


def _packed_readings(
    batch: list[Site], *, clock: Clock, sky: Sky, steps: list[slice], state: int
) -> tuple[list[bytes], int]:
    """Return the readings of some sites, a gzip member for each span of steps, and their number."""
    kwh_by_meter = {
        meter.meter_id: _readings_kwh(site, nth, clock, sky, state)
        for site in batch
        for nth, meter in enumerate(site.meters)
        if meter.reads
    }
    if not kwh_by_meter:
        return [b""] * len(steps), 0
    kwh = np.stack(list(kwh_by_meter.values()))
    members = [
        gzipped(reading_rows(list(kwh_by_meter), clock.stamps_utc[span], kwh[:, span], decimals=3))
        for span in steps
    ]
    return members, int(np.count_nonzero(~np.isnan(kwh[:, clock.window])))


def _readings_kwh(site: Site, nth: int, clock: Clock, sky: Sky, state: int) -> FloatArray:
    """Return what the meter shows [kWh an interval], NaN where it shows nothing."""
    meter = site.meters[nth]
    rng = np.random.default_rng((state, 2, site.index, nth))
    air_c = sky.air_c[site.units[0].weather_station]
    kwh = customer_kw(meter.customer, clock, sky, air_c, rng) * np.float32(
        clock.step_h / meter.multiplier
    )
    for steps in _steps_out(meter, clock):
        kwh[steps] = np.nan
    if meter.starts_on:
        kwh[: clock.step_at(meter.starts_on)] = np.nan
    return kwh


def _steps_out(meter: Meter, clock: Clock) -> Iterator[slice]:
    """Yield the intervals without readings, as far as they lie in the window."""
    for day, hour, length_h in meter.outages_h:
        first = max(clock.step_at(day, hour), clock.window.start)
        last = min(clock.step_at(day, hour + length_h), clock.n_step)
        if first < last:
            yield slice(first, last)
