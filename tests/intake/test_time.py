"""Stamps that are a little off, clocks that change, intervals that change midway."""

from __future__ import annotations

import datetime as dt

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tracker.intake.interval import found_intervals
from tracker.intake.stamps import StampReader, zone_of

CHICAGO = "America/Chicago"
LONG = "meter_id,read_at,kwh\n"


@pytest.fixture
def site(new_utility, made_store, tmp_path):
    """One site with one meter, M."""
    units, connections = "unit_id,rated_kva,site_id\nT,25,S\n", "meter_id,site_id\nM,S\n"
    return new_utility(tmp_path, made_store(("units", units), ("connections", connections)))


def rows(stamps, values, meter: str = "M") -> str:
    return LONG + "".join(f"{meter},{s},{v}\n" for s, v in zip(stamps, values, strict=True))


# --- A little off ---------------------------------------------------------------------------------


@pytest.mark.parametrize("seconds", [-60, -59.5, -1, 0, 1, 30, 60])
def test_stamps_up_to_a_minute_off_are_set_right_and_counted(site, fates, seconds) -> None:
    """Clocks of meters drift; a reading is not lost for a second."""
    stamps = [
        (dt.datetime(2025, 7, 1, hour, tzinfo=dt.UTC) + dt.timedelta(seconds=seconds)).isoformat()
        for hour in range(6)
    ]
    report = site.take("loads", rows(stamps, range(6)), power_factor=1)
    assert fates(report) == (6, 0, 0, 0)
    load = site.site_load("S")
    assert list(load.index) == list(pd.date_range("2025-07-01", periods=6, freq="h", tz="UTC"))
    said = [note for note in report.notes if "set right" in note]
    assert said == ([] if seconds == 0 else ["6 stamps a little off were set right"])


@pytest.mark.parametrize("seconds", [-61, 61, 120, 150])
def test_stamps_more_than_a_minute_off_are_refused(site, fates, seconds) -> None:
    """Further off, nobody knows which interval was meant."""
    off = dt.datetime(2025, 7, 1, 3, tzinfo=dt.UTC) + dt.timedelta(seconds=seconds)
    good = [f"2025-07-01T{hour:02d}:00Z" for hour in (0, 1, 2)]
    report = site.take("loads", rows([*good, off.isoformat()], range(4)))
    assert fates(report) == (3, 0, 0, 1)
    assert report.refusals[0].code == "stamp.off_grid"


def test_the_last_second_before_the_hour_marks_its_end(site) -> None:
    """Some systems write 23:59:59 for the end of a day, others 24:00."""
    for last in ("2025-07-01T23:59:59", "2025-07-01T24:00", "2025-07-01 24:00:00"):
        text = rows(["2025-07-01T22:00", "2025-07-01T23:00", last], [1, 2, 3])
        site.take("loads", text, timezone=CHICAGO, stamps="end", power_factor=1)
        load = site.site_load("S")
        assert load.index[-1] == pd.Timestamp("2025-07-01T23:00", tz=CHICAGO)
        assert load.tolist() == [1, 2, 3]


def test_a_clock_that_is_slow_at_the_change_of_clocks() -> None:
    """A second before an hour that spring leaves out is the hour after it."""
    reader = StampReader("f", zone_of(CHICAGO))
    table = reader.read(["2025-03-09T01:59:59", "2025-03-09T02:59:59", "2025-03-09T02:30"])
    eight = dt.datetime(2025, 3, 9, 8, tzinfo=dt.UTC).timestamp()
    assert table.first_s[:2].tolist() == [eight, eight]
    assert table.problems[2][0] == "stamp.no_such_hour"


# --- Never ----------------------------------------------------------------------------------------


def test_stamps_of_the_future_and_of_another_age_are_refused(site, fates) -> None:
    """A wrong year would open a new month of load; the interval under way may be read."""
    now = dt.datetime.now(dt.UTC).replace(minute=0, second=0, microsecond=0)
    stamps = [(now + dt.timedelta(hours=hour)).isoformat() for hour in (-2, -1, 0, 3)]
    report = site.take("loads", rows([*stamps, "1989-12-31T23:00Z"], range(5)))
    assert fates(report) == (3, 0, 0, 2)
    assert [(each.line, each.code) for each in report.refusals] == [
        (5, "stamp.future"),
        (6, "stamp.out_of_range"),
    ]


# --- The hour that comes twice --------------------------------------------------------------------


@pytest.mark.parametrize("step_min", [60, 30, 15])
@pytest.mark.parametrize("backward", [False, True])
def test_the_repeated_hour_in_files_that_run_either_way(site, fates, step_min, backward) -> None:
    """Newest first, the first of two is the later one; on 2 November 2025 Chicago had 01:00 twice."""
    utc = pd.date_range(
        "2025-11-02T04:00", periods=6 * 60 // step_min, freq=f"{step_min}min", tz="UTC"
    )
    local = [f"{moment.tz_convert(CHICAGO):%Y-%m-%dT%H:%M}" for moment in utc]
    values = np.arange(float(len(utc)))
    sense = -1 if backward else 1
    text = rows(local[::sense], values[::sense])
    report = site.take("loads", text, timezone=CHICAGO, power_factor=1)
    assert fates(report) == (len(utc), 0, 0, 0)
    load = site.site_load("S")
    assert list(load.index) == list(utc)
    np.testing.assert_allclose(load, values * 60 / step_min, rtol=1e-6)


def test_a_meter_that_has_the_hour_once_has_its_first_pass(site, fates) -> None:
    """Told by count: beside a meter that has both, one that has a single reading of the hour."""
    site.take("connections", "meter_id,site_id\nN,S\n")
    both = ["00:00", "01:00", "01:00", "02:00"]
    text = rows([f"2025-11-02T{t}" for t in both], range(4)) + rows(
        [f"2025-11-02T{t}" for t in ("00:00", "01:00", "02:00")], range(3), "N"
    ).removeprefix(LONG)
    report = site.take("loads", text, timezone=CHICAGO, power_factor=1)
    assert fates(report) == (7, 0, 0, 0)
    hours = [moment.hour for moment in site.readings("N").index]
    assert hours == [5, 6, 8]  # the second pass, from 07:00 UTC, is not there


# --- Intervals that change ------------------------------------------------------------------------


@pytest.mark.parametrize("stamps", ["start", "end"])
@pytest.mark.parametrize(("before", "after"), [(60, 15), (15, 60), (30, 5), (60, 30)])
def test_an_interval_that_changes_midway(site, fates, stamps, before, after) -> None:
    """A meter set anew goes on in another interval; taking one for the other is wrong by a factor."""
    start, change, end = (pd.Timestamp(f"2025-07-{each}Z") for each in ("01T00", "01T12", "02T00"))
    first = pd.date_range(start, change, freq=f"{before}min", inclusive="left")
    second = pd.date_range(change, end, freq=f"{after}min", inclusive="left")
    starts = [*first, *second]
    lengths = [before] * len(first) + [after] * len(second)
    marks = [
        start + pd.Timedelta(minutes=length if stamps == "end" else 0)
        for start, length in zip(starts, lengths, strict=True)
    ]
    kwh = [10 * length / 60 for length in lengths]  # 10 kW throughout
    text = rows([mark.isoformat() for mark in marks], kwh)
    report = site.take("loads", text, stamps=stamps, power_factor=1)
    assert fates(report) == (len(marks), 0, 0, 0)
    load = site.site_load("S")
    np.testing.assert_allclose(load, 10.0, rtol=1e-6)
    assert load.index[0] == pd.Timestamp("2025-07-01T00:00Z")
    assert len(load) == 24 * 60 // np.gcd(before, after)
    assert fates(site.take("loads", text, stamps=stamps, power_factor=1)) == (0, len(marks), 0, 0)


@settings(deadline=None)  # the first example compiles
@given(
    step=st.sampled_from([5, 10, 15, 20, 30, 60]),
    n=st.integers(8, 60),
    lost=st.sets(st.integers(2, 58), max_size=4),
    at_end=st.booleans(),
)
def test_a_few_gaps_never_change_the_interval(step, n, lost, at_end) -> None:
    """Property: readings lost here and there leave every other reading's interval as it was."""
    kept = np.array([i for i in range(n) if i not in lost])
    series, order = np.zeros(len(kept), np.int32), np.arange(len(kept))
    steps, last, _ = found_intervals(series, kept * step * 60, order, 1, stamps_at_end=at_end)
    even = np.diff(kept)
    if (even == 1).sum() > (even > 1).sum():
        assert set(steps.tolist()) == {step}
        assert last[0] == step
