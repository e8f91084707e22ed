"""`tracker doubtful` and `tracker rank` over imperfect data."""

from __future__ import annotations

import pandas as pd
import pytest

from tracker.planning.doubtful import MOVED, NO_VERDICT

N_HOUR = 14 * 24


@pytest.fixture
def utility_store(tracker, tmp_path):
    """A store of two sites: a shop of the second is written down at the first."""
    stamps = pd.date_range("2025-07-01", periods=N_HOUR, freq="h", tz="UTC")
    peaks = {"HOME-1": 4.0, "HOME-2": 5.0, "HOME-3": 4.5, "SHOP": 24.0, "FLAT": 4.0}
    loads = pd.concat(
        pd.DataFrame({"meter_id": meter, "read_at": stamps, "kva": kva})
        for meter, kva in peaks.items()
    )
    (tmp_path / "units.csv").write_text(
        "unit_id,rated_kva,feeder,customers\nU-A,25,F-1,3\nU-B,37.5,F-1,2\n"
    )
    (tmp_path / "connections.csv").write_text(
        "meter_id,unit_id\n" + "".join(f"{meter},U-A\n" for meter in list(peaks)[:4]) + "FLAT,U-B\n"
    )
    loads.to_csv(tmp_path / "loads.csv", index=False)
    weather = pd.DataFrame({"read_at": stamps, "air_temp_c": 25.0})
    weather[: N_HOUR - 100].to_csv(tmp_path / "weather.csv", index=False)
    for kind in ("units", "connections", "loads", "weather"):
        assert tracker("import", kind, f"{kind}.csv").status == 0
    return tmp_path


def test_a_doubt_in_words_in_json_and_as_a_file(tracker, utility_store) -> None:
    """The same hint through each door, and always with what it is not."""
    said = tracker("doubtful", "doubts.csv")
    assert said.status == 0
    assert MOVED in said.out
    assert "SHOP: written down at U-A, may hang at U-B" in " ".join(said.out.split())
    assert NO_VERDICT in " ".join(said.out.split())
    (row,) = tracker("doubtful", "--json").data
    assert (row["rank"], row["meter_id"], row["other_unit_id"]) == (1, "SHOP", "U-B")
    table = pd.read_csv(utility_store / "doubts.csv")
    assert table["meter_id"].tolist() == ["SHOP"]
    assert table["evidence"][0] == row["evidence"]


def test_a_feeder_or_an_ending_that_is_none(tracker, utility_store) -> None:
    """One clear line, exit status 2, and no file."""
    answer = tracker("doubtful", "--feeder", "F-9")
    assert (answer.status, answer.out) == (2, "")
    assert "feeder 'F-9' is not in the store; there are: F-1." in answer.err
    answer = tracker("doubtful", "doubts.xls")
    assert answer.status == 2
    assert "unknown ending" in answer.err
    assert tracker("doubtful", "--store", "sqlite:///new.db").status == 2


def test_the_ranking_tells_who_stands_apart(tracker, utility_store) -> None:
    """The last hundred hours have no weather: both units are short of data, and say so."""
    assert tracker("assess").status == 0
    rows = tracker("rank", "--json").data
    assert {row["apart"] for row in rows} == {"only 67 % of its energy is measured"}
    assert "standing" not in rows[0]
    assert "only 67 % of its energy is measured" in " ".join(tracker("rank").out.split())
