"""How fast files come in: against a bare parse and sum, and a day into a store that holds a year.

    pytest tests/benchmarks/test_intake_speed.py -m slow        10, 50 and 100 million rows
    pytest tests/benchmarks/test_intake_speed.py -m "not slow"  small ones, to see that all runs

The largest needs 12 GB of disk. Nothing is asserted about time.
"""

from __future__ import annotations

import itertools
import shutil
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import duckdb
import numpy as np
import pandas as pd
import pytest

from tracker.intake.files import take_file
from tracker.intake.site_load import derive_sites
from tracker.store import fleet as held_fleet
from tracker.store import readings as held_readings
from tracker.store.blocks import Quality, month_of, pack, values_a_month
from tracker.store.engine import Database
from tracker.store.schema import open_database

METERS_A_UNIT = 4
HOURS = 8_760

#: Row i of the file: which meter, and which hour.
ORDERS = {
    "by meter": ("i // {hours}", "i % {hours}"),
    "by hour": ("i % {meters}", "i // {meters}"),
}


# --- A long file against a bare parse and sum -----------------------------------------------------


@dataclass(frozen=True)
class LongFile:
    """A folder with units, connections and one long file of hourly readings."""

    folder: Path
    name: str  #: how many rows, and how they follow each other
    n_row: int


def _registers(folder: Path, n_meter: int) -> None:
    for statement in (
        f"""COPY (SELECT format('U-{{:05d}}', i) AS unit_id, 50 AS rated_kva
            FROM range({n_meter // METERS_A_UNIT}) r(i)) TO '{folder}/units.csv'""",
        f"""COPY (SELECT format('M-{{:07d}}', i) AS meter_id,
                         format('U-{{:05d}}', i // {METERS_A_UNIT}) AS unit_id
            FROM range({n_meter}) r(i)) TO '{folder}/connections.csv'""",
    ):
        duckdb.execute(statement)


def _long_file(folder: Path, n_meter: int, n_hour: int, order: str, name: str) -> LongFile:
    meter, hour = (each.format(meters=n_meter, hours=n_hour) for each in ORDERS[order])
    n_row = n_meter * n_hour
    _registers(folder, n_meter)
    duckdb.execute(
        f"""COPY (SELECT format('M-{{:07d}}', {meter}) AS meter_id,
                         strftime(TIMESTAMP '2025-01-01' + to_hours({hour}),
                                  '%Y-%m-%dT%H:%M:%SZ') AS read_at,
                         (0.2 + 2.8 * (hash(i) % 1000) / 1000)::DECIMAL(8, 3) AS kwh
            FROM range({n_row}) r(i)) TO '{folder}/loads.csv'"""
    )
    return LongFile(folder, name, n_row)


@pytest.fixture(
    scope="module",
    params=[
        pytest.param((24, 240, "by meter", "small"), id="small"),
        *(
            pytest.param(
                (meters, HOURS, order, f"{meters * HOURS / 1e6:.0f} M rows {order}"),
                id=f"{meters * HOURS / 1e6:.0f}M-{order.replace(' ', '-')}",
                marks=pytest.mark.slow,
            )
            for meters, order in (
                (1_144, "by meter"),
                (5_708, "by meter"),
                (5_708, "by hour"),
                (11_416, "by meter"),
            )
        ),
    ],
)
def long_file(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory
) -> Iterator[LongFile]:
    """A file as a utility would send it: of each meter all hours, or of each hour all meters."""
    folder = tmp_path_factory.mktemp("long_file")
    yield _long_file(folder, *request.param)
    shutil.rmtree(folder)


def test_import(stopwatch: Any, long_file: LongFile, tmp_path: Path) -> None:
    """Every reading checked and kept, and the load of every site derived; into an empty store."""
    stores = (f"sqlite:///{tmp_path / f'{number}.db'}" for number in itertools.count())
    stopwatch.time_process(
        f"import, {long_file.name}",
        lambda: ["import", long_file.folder, next(stores)],
        items=long_file.n_row,
        of="row",
    )
    for store in tmp_path.glob("*.db*"):
        store.unlink()


def test_bare_parse_and_sum(stopwatch: Any, long_file: LongFile) -> None:
    """DuckDB parses all columns of the same file and sums it by meter."""
    stopwatch.time_process(
        f"bare parse and sum, {long_file.name}",
        lambda: ["sum", long_file.folder],
        items=long_file.n_row,
        of="row",
    )


# --- One day of all meters into a store that holds months -----------------------------------------

#: Day of the last month that comes in; the days before it are held.
DAY = 15


@pytest.fixture(
    scope="module",
    params=[
        pytest.param((60, 2, 60), id="small"),
        *(
            pytest.param(
                (60_000, months, step), id=f"60000-meters-{months}-months-{step}-min",
                marks=pytest.mark.slow,
            )
            for months, step in ((1, 60), (12, 60), (1, 15))
        ),
    ],
)  # fmt: skip
def held(
    request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory
) -> Iterator[tuple[str, Path, int]]:
    """A store in which all meters were read up to the day before, and the file of the day."""
    n_meter, n_month, step_min = request.param
    folder = tmp_path_factory.mktemp("held")
    _registers(folder, n_meter)
    database = open_database(f"sqlite:///{folder / 'tracker.db'}")
    take_file(database, "units", folder / "units.csv")
    take_file(database, "connections", folder / "connections.csv")
    _hold(database, n_meter, n_month, step_min)
    database.close()
    stamps = f"TIMESTAMP '2025-12-{DAY}' + to_minutes({step_min} * (i // {n_meter}))"
    duckdb.execute(
        f"""COPY (SELECT format('M-{{:07d}}', i % {n_meter}) AS meter_id,
                         strftime({stamps}, '%Y-%m-%dT%H:%M:%SZ') AS read_at,
                         ((hash(i) % 1000) / 1000)::DECIMAL(8, 3) AS kwh
            FROM range({n_meter * 24 * 60 // step_min}) r(i)) TO '{folder}/loads.csv'"""
    )
    name = f"a day of {n_meter:,} meters, {step_min} min, {n_month} months held"
    yield name, folder, n_meter
    shutil.rmtree(folder)


def _hold(database: Database, n_meter: int, n_month: int, step_min: int) -> None:
    """Write readings as intake would, up to the day before the one that comes in."""
    rng = np.random.default_rng(3)
    last = month_of(int(pd.Timestamp("2025-12-01", tz="UTC").timestamp()))
    with database.writing() as connection:
        meters = sorted(
            held_readings.series_keys(
                connection, "meter", [f"M-{n:07d}" for n in range(n_meter)]
            ).values()
        )
        sites = [site["id"] for site in held_fleet.sites(connection)]
        for month in range(last - n_month + 1, last + 1):
            n_value = values_a_month(month, step_min)
            for start in range(0, n_meter, 5_000):
                keys = meters[start : start + 5_000]
                values = rng.random((len(keys), n_value), dtype=np.float32)
                flags = np.full(values.shape, Quality.HELD, dtype=np.uint8)
                if month == last:
                    values[:, (DAY - 1) * 24 * 60 // step_min :] = np.nan
                    flags[:, (DAY - 1) * 24 * 60 // step_min :] = 0
                blocks = dict(zip(keys, pack(values, flags, step_min), strict=True))
                held_readings.replace_blocks(connection, "kw", month, blocks, ())
            derive_sites(connection, {(site, month) for site in sites})


def test_a_day_into_a_store(stopwatch: Any, held: tuple[str, Path, int]) -> None:
    """What a night brings; it is to cost the same whatever the store holds already."""
    name, folder, n_meter = held
    stopwatch.time_process(
        name,
        lambda: ["day", folder, f"sqlite:///{folder / 'tracker.db'}"],
        items=n_meter,
        of="meter",
        rounds=1,
    )
