"""How fast the model is: against the readable form, against the bare kernel.

    pytest tests/benchmarks -m slow        the sizes that figures are quoted for
    pytest tests/benchmarks -m "not slow"  small ones, to see that everything still runs

Nothing is asserted about time: the ratios are printed at the end and written down by people.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray

from tracker.assessment.profiles import Profiles, chosen_period, fleet_plan, profiles
from tracker.assessment.run import assess
from tracker.fleet.nameplate import Nameplate, thermal_parameters
from tracker.intake.files import take_file
from tracker.settings import AssessmentSettings
from tracker.store import fleet as held_fleet
from tracker.store import readings as held_readings
from tracker.store.blocks import Quality, month_of, month_start_s, pack, values_a_month
from tracker.store.engine import Database
from tracker.store.schema import open_database
from tracker.thermal import FleetFigures, ThermalParameters, simulate, summarise
from tracker.thermal.kernel import assess_fleet

Float32Array = NDArray[np.float32]

LIMIT_C = AssessmentSettings().hot_spot_limit_c
RATINGS_KVA = (10.0, 15.0, 25.0, 37.5, 50.0, 75.0, 100.0, 167.0)
STATIONS = ("RIDGE", "VALLEY", "TOWN")


@dataclass(frozen=True)
class Size:
    """How much of everything."""

    kernel_units: int
    store_units: int
    months: int

    @property
    def n_time(self) -> int:
        """Hours of the months."""
        return sum(values_a_month(month, 60) for month in self.year)

    @property
    def year(self) -> range:
        """Months from January 2025."""
        first = month_of(int(pd.Timestamp("2025-01-01", tz="UTC").timestamp()))
        return range(first, first + self.months)


#: 2,000 units and 5,000 units of a year of hours.
FULL = Size(kernel_units=2_000, store_units=5_000, months=12)
SMALL = Size(kernel_units=70, store_units=70, months=1)


@pytest.fixture(
    scope="module",
    params=[pytest.param(SMALL, id="small"), pytest.param(FULL, id="full", marks=pytest.mark.slow)],
)
def size(request: pytest.FixtureRequest) -> Size:
    """Small unless slow runs are asked for."""
    made: Size = request.param
    return made


# --- An invented fleet ----------------------------------------------------------------------------


def _air_temp_c(n_time: int) -> Float32Array:
    hour = np.arange(n_time)
    cycle = 18 + 8 * np.sin(2 * np.pi * (hour - 10) / 24) - 12 * np.cos(2 * np.pi * hour / 8_760)
    air: Float32Array = (cycle + np.array([[-2.0], [0.0], [2.0]])).astype(np.float32)
    return air


def _load_kva(rated_kva: NDArray[np.float64], n_time: int) -> Float32Array:
    """Daily cycles that peak between 0.3 and 1.4 of the rating, hour by hour a little different."""
    rng = np.random.default_rng(7)
    cycle = (0.55 + 0.45 * np.sin(2 * np.pi * (np.arange(n_time) - 9) / 24)).astype(np.float32)
    height = (rated_kva * rng.uniform(0.3, 1.4, len(rated_kva))).astype(np.float32)
    noise = rng.standard_normal((len(rated_kva), n_time), dtype=np.float32)
    return height[:, np.newaxis] * cycle * np.exp(np.float32(0.15) * noise)


def _ratings(n_unit: int) -> NDArray[np.float64]:
    return np.resize(RATINGS_KVA, n_unit)


# --- The kernel against the readable form ---------------------------------------------------------


@dataclass(frozen=True)
class Fleet:
    """A fleet in memory."""

    load_kva: Float32Array
    air_temp_c: Float32Array
    station_index: NDArray[np.int64]
    parameters: ThermalParameters


@pytest.fixture(scope="module")
def fleet(size: Size) -> Fleet:
    """Units of the default characteristics, at three weather stations."""
    ratings = _ratings(size.kernel_units)
    return Fleet(
        _load_kva(ratings, size.n_time),
        _air_temp_c(size.n_time),
        np.arange(len(ratings)) % len(STATIONS),
        thermal_parameters(Nameplate(float(rating)) for rating in ratings),
    )


def test_readable_form(stopwatch: Any, fleet: Fleet) -> None:
    """numpy, all units side by side, hour after hour."""

    def run() -> FleetFigures:
        air_temp_c = fleet.air_temp_c[fleet.station_index]
        trace = simulate(fleet.load_kva, air_temp_c, fleet.parameters, 1.0)
        return summarise(trace, fleet.load_kva, fleet.parameters, 1.0, LIMIT_C)

    figures = stopwatch.time("readable form", run, items=fleet.load_kva.size)
    assert np.isfinite(figures.peak_hot_spot_c).all()


@pytest.mark.parametrize(
    ("name", "threads"), [("fleet kernel", None), ("fleet kernel, one thread", 1)]
)
def test_kernel(stopwatch: Any, fleet: Fleet, name: str, threads: int | None) -> None:
    """The compiled form, on all processors and on one."""

    def run() -> FleetFigures:
        return assess_fleet(
            fleet.load_kva,
            fleet.air_temp_c,
            fleet.station_index,
            fleet.parameters,
            1.0,
            hot_spot_limit_c=LIMIT_C,
            threads=threads,
        )

    figures = stopwatch.time(name, run, items=fleet.load_kva.size)
    assert np.isfinite(figures.peak_hot_spot_c).all()


# --- An assessment against the kernel alone -------------------------------------------------------


@pytest.fixture(scope="module")
def store(size: Size, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Database]:
    """A store of units, their weather and their site load, which is written as intake would."""
    database = open_database(f"sqlite:///{tmp_path_factory.mktemp('store') / 'tracker.db'}")
    ratings = _ratings(size.store_units)
    stations = list(itertools.islice(itertools.cycle(STATIONS), len(ratings)))
    units = pd.DataFrame(
        {
            "unit_id": [f"U-{number:05d}" for number in range(len(ratings))],
            "rated_kva": ratings,
            "weather_station": stations,
        }
    )
    take_file(database, "units", units)
    stamps = pd.date_range("2025-01-01", periods=size.n_time, freq="h", tz="UTC")
    weather = [
        pd.DataFrame({"station_id": station, "read_at": stamps, "air_temp_c": air_temp_c})
        for station, air_temp_c in zip(STATIONS, _air_temp_c(size.n_time), strict=True)
    ]
    take_file(database, "weather", pd.concat(weather))
    load_kva = _load_kva(ratings, size.n_time)
    with database.writing() as connection:
        sites = [site["id"] for site in held_fleet.sites(connection)]
        for month in size.year:
            first = (month_start_s(month) - month_start_s(size.year[0])) // 3600
            values = load_kva[:, first : first + values_a_month(month, 60)]
            flags = np.full(values.shape, Quality.HELD, dtype=np.uint8)
            payloads = dict(zip(sites, pack(values, flags, 60), strict=True))
            held_readings.replace_site_load(connection, month, payloads)
    yield database
    database.close()


def test_assessment(stopwatch: Any, store: Database, size: Size) -> None:
    """From the store's blocks to figures in the store."""
    summary = stopwatch.time(
        "assessment from the store",
        lambda: assess(store),
        items=size.store_units * size.n_time,
    )
    assert summary.units_without_figures == 0


def test_kernel_alone(stopwatch: Any, store: Database, size: Size) -> None:
    """The same arrays, already in memory."""
    with store.reading() as connection:
        batches = list(
            profiles(connection, fleet_plan(connection, chosen_period(connection, None, None)))
        )

    def run(batch: Profiles) -> FleetFigures:
        return assess_fleet(
            batch.load_kva,
            batch.air_temp_c,
            batch.station_index,
            batch.parameters,
            batch.step_min / 60,
            hot_spot_limit_c=LIMIT_C,
        )

    figures = stopwatch.time(
        "fleet kernel on the same arrays",
        lambda: [run(batch) for batch in batches],
        items=size.store_units * size.n_time,
    )
    assert sum(len(batch.aging_hours) for batch in figures) == size.store_units
