"""`store check` finds whatever is derived and is not what the readings give."""

from __future__ import annotations

import numpy as np
import pytest


@pytest.fixture
def filled(ground):
    """A site with a filled gap, and one whose energy is spread."""
    ground.meter("M")
    kw = 1.0 + np.arange(48.0)
    kw[5] = np.nan
    ground.read("M", kw)
    ground.unit(25.0, "S-2")
    ground.meter("E", "S-2")
    ground.energy("E", 500.0)
    assert ground.problems() == []
    return ground


@pytest.mark.parametrize(
    ("statement", "problem"),
    [
        (
            "UPDATE site_load_block SET measured = NULL WHERE site_key = 1",
            "site S: its load is not",
        ),
        ("UPDATE site_load_block SET measured = zeroblob(744)", "site S: its load is not"),
        ("UPDATE meter_connection SET power_factor = 0.5 WHERE site_key = 1", "site S: its load"),
        ("UPDATE unit SET rated_kva = 0.1 WHERE id = 1", "site S: its load"),
        ("INSERT INTO reading_rule VALUES ('line_gap_h', 0)", "site S: its load"),
        ("UPDATE monthly_energy SET kwh = 501", "meter E: its monthly energy is not spread"),
        ("UPDATE monthly_energy SET replaced_by = 1", "meter E: its monthly energy is not spread"),
        (
            "UPDATE series SET customer_class = 'shop' WHERE name = 'E'",
            "meter E: its monthly energy",
        ),
        ("DELETE FROM spread_block", "meter E: its monthly energy is not spread"),
        ("INSERT INTO unmetered_load VALUES (1, 1, 'always', 1.0, NULL)", "site S: its load"),
    ],
)
def test_stale_figures_are_found(filled, statement, problem) -> None:
    """Whatever stands behind a figure was changed behind the program's back."""
    with filled.database.writing() as connection:
        assert connection.exec_driver_sql(statement).rowcount > 0
    assert any(line.startswith(problem) for line in filled.problems())


def test_a_damaged_spread_block_is_found(filled) -> None:
    """A flipped byte, by its checksum."""
    with filled.database.writing() as connection:
        payload = bytearray(connection.exec_driver_sql("SELECT payload FROM spread_block").scalar())
        payload[100] ^= 1
        connection.exec_driver_sql("UPDATE spread_block SET payload = ?", (bytes(payload),))
    (problem,) = filled.problems()
    assert problem.startswith("spread_block (")
