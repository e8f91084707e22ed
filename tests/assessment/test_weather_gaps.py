"""Gaps in air temperatures: short ones are bridged by a straight line, longer ones are left."""

from __future__ import annotations

import datetime as dt

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tracker.assessment.profiles import bridged
from tracker.assessment.run import assess
from tracker.assessment.trace import unit_trace

DAY = 24


def take(utility, air: dict[str, float], *, n_hour: int = 3 * DAY, start: str, freq: str = "h"):
    """Take in a constant load, and air temperatures by their stamps."""
    stamps = pd.date_range(start, periods=n_hour, freq="h", tz="UTC")
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    utility.take("loads", pd.DataFrame({"unit_id": "T", "read_at": stamps, "kva": 20.0}))
    weather = pd.DataFrame({"read_at": list(air), "air_temp_c": list(air.values())})
    utility.take("weather", weather, interval=60 if freq == "h" else 30)


def hours(start: str, n_hour: int, freq: str = "h") -> dict[str, float]:
    """Return an air temperature a stamp that rises by a quarter of a degree each, from 0 °C."""
    stamps = pd.date_range(start, periods=n_hour, freq=freq, tz="UTC")
    return {f"{stamp:%Y-%m-%dT%H:%MZ}": place / 4 for place, stamp in enumerate(stamps)}


def without(air: dict[str, float], *gaps: tuple[int, int]) -> dict[str, float]:
    """Leave out readings: (the first, how many)."""
    gone = {place for first, number in gaps for place in range(first, first + number)}
    return {name: air_c for place, (name, air_c) in enumerate(air.items()) if place not in gone}


@pytest.mark.parametrize("first", [1, 30, 45, 47, 48])
@pytest.mark.parametrize("n_hour", [1, 2, 3])
def test_up_to_three_hours_are_bridged(utility, first, n_hour) -> None:
    """The air rises evenly, so that the line is what was left out; also where the gap lies
    on or beside the border of two months (hour 48 here)."""
    air = hours("2025-06-29", 3 * DAY)
    take(utility, without(air, (first, n_hour)), start="2025-06-29")
    trace = unit_trace(utility.database, "T")
    np.testing.assert_allclose(trace.air_temp_c, np.arange(3 * DAY) / 4, atol=1e-5)
    assert np.flatnonzero(trace.air_filled).tolist() == list(range(first, first + n_hour))


@pytest.mark.parametrize("first", [1, 30, 47])
def test_four_hours_are_left_missing(utility, first) -> None:
    """A longer gap is weather that nobody knows."""
    air = hours("2025-06-29", 3 * DAY)
    take(utility, without(air, (first, 4)), start="2025-06-29")
    trace = unit_trace(utility.database, "T")
    assert np.flatnonzero(np.isnan(trace.air_temp_c)).tolist() == list(range(first, first + 4))
    assert not trace.air_filled.any()


@pytest.mark.parametrize(("lost", "known"), [(3, True), (4, False)])
def test_at_the_edges_of_the_period_the_readings_beyond_it_count(utility, lost, known) -> None:
    """The gap has a reading before the period, and one after it: the same line as in its middle."""
    air = hours("2025-06-30T12:00Z", 3 * DAY)
    air = without(air, (12 - lost + 1, lost), (36, lost))
    take(utility, air, start="2025-06-30T12:00", n_hour=3 * DAY)
    start, end = dt.datetime(2025, 7, 1, tzinfo=dt.UTC), dt.datetime(2025, 7, 2, 2, tzinfo=dt.UTC)
    assess(utility.database, starts_at=start, ends_at=end)
    trace = unit_trace(utility.database, "T")
    assert len(trace.air_temp_c) == 26
    assert np.isfinite(trace.air_temp_c[[0, 24, 25]]).all() == known
    if known:
        np.testing.assert_allclose(trace.air_temp_c, (12 + np.arange(26)) / 4, atol=1e-5)


def test_nothing_is_invented_before_the_first_reading_and_after_the_last(utility) -> None:
    """A line needs two ends."""
    air = without(hours("2025-07-01", 2 * DAY), (0, 2), (2 * DAY - 2, 2))
    take(utility, air, start="2025-07-01", n_hour=2 * DAY)
    trace = unit_trace(utility.database, "T")
    gaps = np.flatnonzero(np.isnan(trace.air_temp_c)).tolist()
    assert gaps == [0, 1, 2 * DAY - 2, 2 * DAY - 1]


def test_half_hourly_weather_has_a_finer_line(utility) -> None:
    """Three hours of half-hourly readings are six of them; seven are too many."""
    air = hours("2025-07-01", 4 * DAY, freq="30min")
    take(utility, without(air, (50, 6), (100, 7)), start="2025-07-01", freq="30min")
    trace = unit_trace(utility.database, "T")
    np.testing.assert_allclose(trace.air_temp_c[50:56], np.arange(50, 56) / 4, atol=1e-5)
    assert np.isnan(trace.air_temp_c[100:107]).all()


def test_quarter_hours_of_load_share_a_bridged_hour(utility, hourly_csv) -> None:
    """The line is drawn from reading to reading, and each of its hours holds for its own hour."""
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    utility.take("loads", hourly_csv("T", np.full(2 * 96, 20.0), freq="15min"))
    air = without(hours("2025-07-01", 2 * DAY), (30, 2))
    weather = pd.DataFrame({"read_at": list(air), "air_temp_c": list(air.values())})
    utility.take("weather", weather)
    trace = unit_trace(utility.database, "T")
    assert trace.air_temp_c.tolist() == [hour / 4 for hour in range(2 * DAY) for _ in range(4)]
    assert trace.air_filled.sum() == 8


@given(
    st.lists(st.floats(-40, 50, width=32) | st.just(float("nan")), min_size=1, max_size=60),
    st.integers(0, 5),
)
def test_a_line_changes_no_reading_and_stays_between_its_ends(values, longest) -> None:
    """Property: what was read stays; what is filled lies between its neighbours; a gap that is left
    is too long or has one end only."""
    series = np.array(values, dtype=np.float32)
    filled = bridged(series, longest)
    known = np.isfinite(series)
    np.testing.assert_array_equal(filled[known], series[known])
    for place in np.flatnonzero(~known):
        before, after = np.flatnonzero(known[:place]), np.flatnonzero(known[place:])
        if not (before.size and after.size):
            assert np.isnan(filled[place])
            continue
        first, last = before[-1], place + after[0]
        if last - first - 1 > longest:
            assert np.isnan(filled[place])
        else:
            low, high = sorted((series[first], series[last]))
            assert low - 1e-4 <= filled[place] <= high + 1e-4
