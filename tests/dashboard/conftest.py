"""A small store with all that a page has to show, and a real server in front of it."""

from __future__ import annotations

import os
import shutil
import threading
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from sqlalchemy import insert
from waitress.server import create_server

from tracker.assessment.run import assess
from tracker.dashboard.app import create_app
from tracker.store.blocks import Quality, pack, values_a_month
from tracker.store.engine import Database
from tracker.store.models import Placement, ReadingBlock, Series, Site, SiteLoadBlock, Unit
from tracker.store.schema import open_database

#: July 2026, as months since January 1970.
MONTHS = ((2026 - 1970) * 12 + 6,)

N_UNIT = 240
HOTTEST = "LK-22-0007"
NO_DATA = "LK-12-0240"
NOWHERE = "LK-12-0239"
GAPPY = "LK-11-0238"
FEEDERS = ("LK-11 Saltmarsh", "LK-12 Tannery", "LK-21 Orchard", "LK-22 Quarry")
CHROMIUM = "/usr/bin/chromium"


def unit_id(number: int) -> str:
    """Return the id of a unit: its feeder follows from its number."""
    if number >= 238:
        return {238: GAPPY, 239: NOWHERE, 240: NO_DATA}[number]
    return HOTTEST if number == 7 else f"{feeder_of(number)[:5]}-{number:04d}"


def feeder_of(number: int) -> str:
    """Return the feeder a unit stands on."""
    if number >= 238:
        return FEEDERS[0 if number == 238 else 1]
    return FEEDERS[3 if number == 7 else number % 4]


def _months(values: np.ndarray, step_min: int = 60) -> Iterator[tuple[int, np.ndarray]]:
    start = 0
    for month in MONTHS:
        stop = start + values_a_month(month, step_min)
        yield month, values[:, start:stop].astype(np.float32)
        start = stop


def _packed(values: np.ndarray) -> list[bytes]:
    flags = np.where(np.isfinite(values), Quality.HELD, 0).astype(np.uint8)
    return pack(values, flags, 60)


def _summer() -> tuple[np.ndarray, np.ndarray]:
    """Return air temperature [°C] and loads [kVA] of a July with a heat wave, hour by hour."""
    n_time = sum(values_a_month(month, 60) for month in MONTHS)
    hour = np.arange(n_time)
    day = hour / 24
    wave = 9.0 * np.exp(-(((day - 16) / 3.5) ** 2))
    air_c = 25.0 + 5.0 * np.sin(np.pi * day / 31) + wave
    air_c += 7.0 * np.cos(2 * np.pi * (hour % 24 - 21) / 24)
    rng = np.random.default_rng(20_260_601)
    level = np.sort(rng.uniform(0.25, 0.85, N_UNIT))[::-1].copy()
    rng.shuffle(level)
    level[6] = 1.0
    evening = np.exp(-(((hour % 24 - 23) / 3.2) ** 2)) + 0.3
    cooling = 1.0 + 0.06 * np.clip(air_c - 24.0, 0.0, None)
    noise = rng.normal(1.0, 0.06, (N_UNIT, n_time))
    load_kva = rated_kva()[:, np.newaxis] * level[:, np.newaxis] * evening * cooling * noise * 0.62
    load_kva[237, 300:600] = np.nan
    load_kva[238:] = np.nan
    return air_c[np.newaxis], load_kva


def rated_kva() -> np.ndarray:
    """Return the rating of each unit [kVA]."""
    return np.array([(15.0, 25.0, 37.5, 50.0, 75.0)[number % 5] for number in range(1, N_UNIT + 1)])


def fill(database: Database) -> None:
    """Put units, sites, loads and weather into an empty store."""
    air_c, load_kva = _summer()
    ratings = rated_kva()
    with database.writing() as connection:
        numbers = range(1, N_UNIT + 1)
        connection.execute(
            insert(Unit),
            [
                {
                    "id": n,
                    "unit_id": unit_id(n),
                    "rated_kva": float(ratings[n - 1]),
                    "hv_volts": 7_200.0,
                    "lv_volts": 240.0,
                    "mounting": "pole",
                    "year_made": 1974 if n == 7 else 1990 + n % 30,
                    "winding_rise_c": 55.0 if n == 7 else None,
                    "no_load_loss_w": 90.0 if n == 7 else None,
                    "load_loss_w": 410.0 if n == 7 else None,
                }
                for n in numbers
            ],
        )
        connection.execute(
            insert(Site),
            [
                {
                    "id": n,
                    "site_id": f"S-{n:04d}",
                    "feeder": feeder_of(n),
                    "customers": 4 + n % 9,
                    "critical_customers": int(n == 7),
                }
                for n in numbers
            ],
        )
        stays = [{"unit_key": n, "site_key": n} for n in numbers if unit_id(n) != NOWHERE]
        connection.execute(insert(Placement), stays)
        connection.execute(insert(Series), [{"id": 1, "kind": "station", "name": "LARK"}])
        for month, values in _months(air_c):
            connection.execute(
                insert(ReadingBlock).values(
                    series_key=1,
                    quantity="air_temp_c",
                    month=month,
                    n_held=values.shape[1],
                    payload=_packed(values)[0],
                )
            )
        for month, values in _months(load_kva[:238]):
            connection.execute(
                insert(SiteLoadBlock),
                [
                    {"site_key": key, "month": month, "payload": payload}
                    for key, payload in enumerate(_packed(values), 1)
                ],
            )


@pytest.fixture(scope="session")
def fleet(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Database]:
    """An assessed fleet, for reading only."""
    database = open_database(f"sqlite:///{tmp_path_factory.mktemp('store') / 'larkmoor.db'}")
    fill(database)
    assess(database)
    yield database
    database.close()


@pytest.fixture
def empty(tmp_path: Path) -> Iterator[Database]:
    """A new store."""
    database = open_database(f"sqlite:///{tmp_path / 'new.db'}")
    yield database
    database.close()


@pytest.fixture(scope="session")
def served() -> Iterator[Any]:
    """Return a function that serves a store and tells its address."""
    running = []

    def serve(database: Database) -> str:
        server = create_server(create_app(database).server, host="127.0.0.1", port=0, threads=8)
        thread = threading.Thread(target=server.run, daemon=True)
        thread.start()
        running.append((server, thread))
        return f"http://127.0.0.1:{server.effective_port}/"

    yield serve
    for server, thread in running:
        server.close()
        server.task_dispatcher.shutdown()
        thread.join(timeout=5)


@pytest.fixture(scope="session")
def fleet_url(fleet: Database, served: Any) -> str:
    """Return the address of the assessed fleet's dashboard."""
    return str(served(fleet))


@pytest.fixture(scope="session")
def browser_type_launch_args(browser_type_launch_args: dict[str, Any]) -> dict[str, Any]:
    """Take the system's Chromium; without one, skip, or fail where nothing may be skipped."""
    found = shutil.which("chromium") or (CHROMIUM if Path(CHROMIUM).exists() else None)
    if found is None:
        if os.environ.get("TRACKER_TEST_REQUIRE_ALL") == "1":
            pytest.fail("no Chromium found, and TRACKER_TEST_REQUIRE_ALL=1 forbids to skip")
        pytest.skip("no Chromium found")
    return {**browser_type_launch_args, "executable_path": found, "args": ["--no-sandbox"]}


@pytest.fixture(scope="session")
def base_url() -> None:
    """Take the place of a plugin's fixture that this pytest warns of; addresses here are whole."""
