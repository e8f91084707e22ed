"""Stores that an earlier release made: nothing is lost, and all that is derived follows the new rules.

`store_0001.db.gz` was written by the release whose store was at revision 0001: two units, three
meters of eleven hourly days with gaps of two hours, three corrected readings, weather, an assessment.
"""

from __future__ import annotations

import gzip
import sqlite3
from pathlib import Path

import numpy as np
import pytest

from tracker.cli.main import run
from tracker.errors import StoreError
from tracker.intake.care import check_store
from tracker.store.blocks import Quality, n_held
from tracker.store.schema import HEAD, open_database

STORE_0001 = Path(__file__).with_name("store_0001.db.gz")


@pytest.fixture
def old(tmp_path: Path) -> Path:
    """A copy of the old store."""
    path = tmp_path / "tracker.db"
    path.write_bytes(gzip.decompress(STORE_0001.read_bytes()))
    return path


def rows(path: Path, query: str) -> list[tuple[object, ...]]:
    with sqlite3.connect(path) as connection:
        found = sorted(connection.execute(query), key=repr)
    connection.close()
    return found


def upgraded(path: Path, monkeypatch) -> None:
    monkeypatch.setattr("sys.argv", ["tracker", "store", "upgrade", "--store", f"sqlite:///{path}"])
    with pytest.raises(SystemExit) as stopped:
        run()
    assert not stopped.value.code


def test_an_old_store_waits_for_its_upgrade(old) -> None:
    """It is not changed behind anybody's back."""
    with pytest.raises(StoreError, match="is at revision 0001, this program needs"):
        open_database(f"sqlite:///{old}")


def test_the_upgrade_keeps_every_reading(old, monkeypatch) -> None:
    """Blocks bit for bit, the ledger, what was replaced, the assessment."""
    tables = {
        "reading_block": "series_key, quantity, month, payload",
        "superseded_block": "series_key, quantity, month, replaced_by, payload",
        "intake_file": "name, fingerprint, readings, taken, unchanged, corrected, refused",
        "unit_result": "*",
        "meter_connection": "meter_key, site_key, multiplier",
    }
    wanted = {table: rows(old, f"SELECT {names} FROM {table}") for table, names in tables.items()}
    upgraded(old, monkeypatch)
    for table, names in tables.items():
        assert rows(old, f"SELECT {names} FROM {table}") == wanted[table]
    assert rows(old, "SELECT version_num FROM alembic_version") == [(HEAD,)]
    for count, payload in rows(old, "SELECT n_held, payload FROM reading_block"):
        assert count == n_held(payload)
        assert count > 0


def test_the_upgrade_derives_loads_by_the_rules_of_today(old, monkeypatch, new_utility) -> None:
    """The older program left gaps open; now they are filled, and told from what was measured."""
    upgraded(old, monkeypatch)
    folder = old.parent / "copy"
    folder.mkdir()
    utility = new_utility(folder, old)
    assert check_store(utility.database) == []
    flags = utility.site_flags("S-1")
    assert len(flags) == 11 * 24 + 1
    assert (flags.to_numpy() & Quality.FILLED).astype(bool).sum() == 4
    np.testing.assert_array_equal(utility.site_flags("S-2"), Quality.HELD)
