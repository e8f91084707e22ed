"""`store check` and `store info`: what is held, and whether it is sound."""

from __future__ import annotations

import sqlite3

import numpy as np
import pytest

from tracker.store.care import store_info
from tracker.store.schema import HEAD

UNITS = "unit_id,rated_kva,site_id\nT-1,25,S-1\nT-2,50,S-2\n"
CONNECTIONS = "meter_id,site_id\nM-1,S-1\nM-2,S-1\n"


@pytest.fixture
def filled(new_utility, made_store, tmp_path, hourly_csv):
    """Two meters on a site, and a unit measured as a whole, for a day."""
    heading, hours = "meter_id,read_at,kwh", np.arange(24.0)
    store = made_store(
        ("units", UNITS),
        ("connections", CONNECTIONS),
        *(("loads", hourly_csv(meter, hours, heading=heading)) for meter in ("M-1", "M-2")),
        ("loads", hourly_csv("T-2", hours)),
        ("weather", "read_at,air_temp_c\n2025-07-01T00:00Z,30\n2025-07-01T01:00Z,31\n"),
    )
    utility = new_utility(tmp_path, store)
    assert utility.problems() == []
    return utility


def changed(filled, statement: str, *values: object) -> None:
    """Change the file behind the program's back."""
    with sqlite3.connect(filled.folder / "tracker.db") as connection:
        assert connection.execute(statement, values).rowcount > 0
    connection.close()


@pytest.mark.parametrize("table", ["reading_block", "site_load_block"])
def test_a_flipped_byte_is_found_and_its_place_named(filled, table) -> None:
    """Damage must be found by asking, not by a wrong figure a year later."""
    with sqlite3.connect(filled.folder / "tracker.db") as connection:
        payload = bytearray(connection.execute(f"SELECT payload FROM {table}").fetchone()[0])
        payload[200] ^= 0x10
        connection.execute(
            f"UPDATE {table} SET payload = ? WHERE rowid = (SELECT min(rowid) FROM {table})",
            [bytes(payload)],
        )
    connection.close()
    (problem,) = filled.problems()
    assert problem.startswith(f"{table} (")
    assert "checksum" in problem
    assert "month 666" in problem


def test_a_stale_site_load_is_found(filled) -> None:
    """A site's load is derived; when it is not what its readings give, figures lie."""
    changed(filled, "UPDATE meter_connection SET multiplier = 2 WHERE id = 1")
    (problem,) = filled.problems()
    assert problem.startswith("site S-1: its load is not what its readings give")


def test_a_missing_site_load_is_found(filled) -> None:
    """A site whose load was lost would be ranked as if nothing hung on it."""
    changed(filled, "DELETE FROM site_load_block WHERE site_key = 2")
    assert [problem[:8] for problem in filled.problems()] == ["site S-2"]


def test_a_site_load_of_no_readings_is_found(filled) -> None:
    """A load that nothing stands behind must not be ranked."""
    changed(filled, "DELETE FROM reading_block WHERE quantity = 'kva'")
    assert [problem[:8] for problem in filled.problems()] == ["site S-2"]


def test_a_site_load_of_a_month_without_readings_is_found(filled) -> None:
    """Nor one of a month in which no reading at all is held."""
    changed(filled, "DELETE FROM reading_block")
    assert [problem[:8] for problem in filled.problems()] == ["site S-1", "site S-2"]


def test_a_block_in_the_wrong_month_is_found(filled) -> None:
    """A sound block beside the wrong month would move its readings in time."""
    changed(filled, "UPDATE reading_block SET month = 661 WHERE quantity = 'kva'")
    assert any("length does not fit its month" in problem for problem in filled.problems())


def test_dangling_rows_are_found(filled) -> None:
    """Foreign keys hold only while they are switched on; another program may not have."""
    changed(filled, "DELETE FROM site WHERE site_id = 'S-2'")
    assert any("refers to a row of site" in problem for problem in filled.problems())


def test_info_counts_what_is_held(filled) -> None:
    """The first thing anybody asks of a store."""
    facts = store_info(filled.database)
    assert facts["store"] == filled.url
    assert facts["size_mb"] == round((filled.folder / "tracker.db").stat().st_size / 1e6, 1)
    wanted = {
        "revision": HEAD,
        "units": 2,
        "sites": 2,
        "meters": 2,
        "connections": 2,
        "units_measured": 1,
        "weather_stations": 1,
        "first_month": "2025-07",
        "last_month": "2025-07",
        "files_taken_in": 6,
        "rows_refused": 0,
        "assessments": 0,
        "newest_assessment": None,
    }
    assert {name: facts[name] for name in wanted} == wanted


def test_info_of_an_empty_store(utility) -> None:
    """A new store holds nothing, and says so."""
    facts = store_info(utility.database)
    assert (facts["units"], facts["first_month"], facts["newest_assessment"]) == (0, None, None)
