"""Tables as CSV files: exact enough, harmless in a spreadsheet, never half-written."""

from __future__ import annotations

import datetime as dt
import io
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from tracker.errors import InputError
from tracker.planning.priority import priority_list
from tracker.reports.tables import csv_text, write_csv


def test_numbers_keep_their_digits(summer) -> None:
    """Contract, section 4: at least six significant digits, for float32 figures all of them."""
    table = priority_list(summer.database)
    text = csv_text(table)
    back = pd.read_csv(io.StringIO(text))
    for name in table.select_dtypes("number"):
        np.testing.assert_allclose(back[name], table[name].astype(float), rtol=5e-9)
    tiny = csv_text(pd.DataFrame({"x": [1.23456789e-7, 123456.789, np.float32(0.1)]}))
    assert tiny.splitlines()[1:] == ["1.23456789e-07", "123456.789", "0.100000001"]


@pytest.mark.parametrize("sign", ["=", "+", "-", "@", "\t", "\r"])
def test_what_looks_like_a_formula_is_made_harmless(sign) -> None:
    """A unit id out of somebody's file must not run in somebody else's spreadsheet."""
    text = csv_text(pd.DataFrame({"unit_id": [f"{sign}1+1"]}))
    assert text.removeprefix("unit_id\n").strip('"\n') == f"'{sign}1+1"


def test_negative_numbers_stay_numbers() -> None:
    """A frosty air temperature is no formula."""
    assert csv_text(pd.DataFrame({"air_temp_c": [-12.5]})).splitlines() == ["air_temp_c", "-12.5"]


@pytest.mark.parametrize("zone", ["UTC", "America/Chicago"])
def test_times_are_iso_8601_in_utc(zone) -> None:
    """Whatever zone a frame came in."""
    moment = pd.Timestamp("2025-07-01T05:00Z").tz_convert(zone)
    table = pd.DataFrame({"at": [moment, pd.NaT]})
    assert csv_text(table).splitlines() == ["at", "2025-07-01T05:00:00Z", '""']


def test_what_is_not_known_is_blank() -> None:
    """NaN, None and no time at all."""
    table = pd.DataFrame({"a": [np.nan], "b": [None], "c": ["x"], "d": [pd.NaT]})
    assert csv_text(table).splitlines()[1] == ",,x,"


def test_a_file_is_replaced_only_when_all_is_written(tmp_path: Path, monkeypatch) -> None:
    """Yesterday's list is better than half of today's."""
    path = tmp_path / "list.csv"
    table = pd.DataFrame({"a": [1]})
    write_csv(table, path)
    real = Path.write_text

    def disk_full(self: Path, text: str, **options: object) -> int:
        real(self, text[:3])
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Path, "write_text", disk_full)
    with pytest.raises(InputError, match="cannot be written: No space left"):
        write_csv(pd.DataFrame({"a": [2]}), path)
    assert path.read_text() == "a\n1\n"
    assert [each.name for each in tmp_path.iterdir()] == ["list.csv"]


def test_a_folder_in_the_way_leaves_nothing_behind(tmp_path: Path) -> None:
    """Nothing half-written, not even beside it."""
    (tmp_path / "list.csv").mkdir()
    with pytest.raises(InputError, match="cannot be written"):
        write_csv(pd.DataFrame({"a": [1]}), tmp_path / "list.csv")
    assert [each.name for each in tmp_path.iterdir()] == ["list.csv"]


def test_the_list_as_a_file(summer, tmp_path) -> None:
    """Names, times and blanks as other programs read them."""
    path = tmp_path / "list.csv"
    write_csv(priority_list(summer.database), path)
    back = pd.read_csv(path).set_index("unit_id")
    assert dt.datetime.fromisoformat(back.at["HOT", "peak_hot_spot_at"]).tzinfo == dt.UTC
    assert back.loc["DARK", ["peak_hot_spot_c", "peak_hot_spot_at", "suggested_kva"]].isna().all()
    assert path.read_bytes().count(b"\r") == 0
