"""The package as a notebook sees it: frames in, frames out."""

from __future__ import annotations

import datetime as dt
import re
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest

import tracker
from tracker.errors import InputError, TrackerError

ZONE = "America/Chicago"


@pytest.fixture
def store(tmp_path):
    """A store by its URL, as a notebook opens it."""
    with tracker.open_store(f"sqlite:///{tmp_path / 'notebook.db'}") as opened:
        yield opened


def test_the_public_names() -> None:
    """What the package promises is exactly `__all__`."""
    assert tracker.__all__ == ["__version__", "open_store"]
    assert all(hasattr(tracker, name) for name in tracker.__all__)


def test_version_is_three_numbers() -> None:
    """Results store the version they were made with."""
    assert re.fullmatch(r"\d+\.\d+\.\d+", tracker.__version__)


def test_importing_the_package_is_cheap() -> None:
    """Looking at the version must not load the compiler."""
    code = (
        "import sys, tracker, tracker.thermal; "
        "print(sorted({'numba', 'pandas', 'dash', 'sqlalchemy', 'duckdb'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def fill(store) -> pd.DatetimeIndex:
    """Take in frames of every kind, with stamps that know their zone, floats and None."""
    stamps = pd.date_range("2025-07-01", periods=96, freq="h", tz=ZONE)
    store.import_units(
        pd.DataFrame(
            {
                "unit_id": ["T-1", "T-2"],
                "rated_kva": [25.0, np.nan],
                "feeder": [None, "F"],
                "customers": [4.0, np.nan],
                "top_oil_rise_c": [np.nan, 50.0],
            }
        )
    )
    store.import_connections(
        pd.DataFrame({"meter_id": ["M"], "unit_id": ["T-1"], "multiplier": [2.0]})
    )
    loads = pd.DataFrame({"meter_id": "M", "read_at": stamps, "kwh": np.full(96, 9.5)})
    loads.loc[50, "kwh"] = np.nan
    report = store.import_loads(loads)
    assert (report.fates.taken, len(report.refusals)) == (95, 1)
    assert report.refusals[0].line == 52
    store.import_weather(pd.DataFrame({"read_at": stamps, "air_temp_c": np.full(96, 30)}))
    return stamps


def test_frames_in_and_frames_out(store) -> None:
    """Contract, section 5, from end to end."""
    stamps = fill(store)
    summary = store.assess()
    assert summary.units == 1
    ranking = store.ranking()
    assert ranking["unit_id"].tolist() == ["T-1"]
    assert ranking["peak_load_pct"].tolist() == pytest.approx([80.0], rel=1e-6)
    assert isinstance(ranking["peak_hot_spot_at"].dtype, pd.DatetimeTZDtype)
    assert ranking["suggested_kva"].dtype == float
    trace = store.trace("T-1")
    assert list(trace) == [
        *("interval_start", "load_kva", "air_temp_c", "top_oil_c", "hot_spot_c"),
        "aging_factor",
    ]
    assert trace["interval_start"].tolist() == list(stamps.tz_convert("UTC"))
    # The hour that was blank is filled by a straight line, and is not counted as measured.
    np.testing.assert_allclose(trace["load_kva"], 20.0, rtol=1e-6)
    assert ranking["coverage_pct"].tolist() == pytest.approx([100 * 71 / 72], rel=1e-3)


def test_a_frame_whose_stamps_know_no_zone(store) -> None:
    """They are local, as in a file; the option says where."""
    stamps = pd.date_range("2025-07-01", periods=3, freq="h")
    frame = pd.DataFrame({"meter_id": "M", "read_at": stamps, "kw": [1, 2, 3]})
    with pytest.raises(InputError, match="--timezone"):
        store.import_loads(frame)
    assert store.import_loads(frame, timezone=ZONE).fates.taken == 3


def test_a_frame_is_not_changed_by_its_import(store) -> None:
    """A notebook goes on with what it had."""
    frame = pd.DataFrame({"unit_id": ["T"], "rated_kva": [25]}, index=[7])
    before = frame.copy()
    store.import_units(frame)
    pd.testing.assert_frame_equal(frame, before)


def test_a_trace_between_two_moments(store) -> None:
    """Datetimes of any zone name the part to show."""
    fill(store)
    store.assess()
    start = dt.datetime(2025, 7, 2, tzinfo=dt.UTC)
    trace = store.trace("T-1", starts_at=start, ends_at=pd.Timestamp("2025-07-03", tz="UTC"))
    assert len(trace) == 24
    assert trace["interval_start"][0] == start


@pytest.mark.parametrize("call", ["assess", "trace"])
def test_a_moment_without_a_zone_is_refused(store, call) -> None:
    """It would mean another period on another machine."""
    fill(store)
    store.assess()
    naive = dt.datetime(2025, 7, 2)
    with pytest.raises(InputError, match="zone"):
        store.trace("T-1", starts_at=naive) if call == "trace" else store.assess(starts_at=naive)


def test_every_error_has_the_common_base(store) -> None:
    """One `except` catches all that is meant for a person."""
    for call in (store.assess, store.ranking, lambda: store.trace("X")):
        with pytest.raises(TrackerError):
            call()
    with pytest.raises(TrackerError):
        store.import_loads("nowhere.csv")
