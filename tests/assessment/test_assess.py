"""From the store's readings to figures: what counts, whose it is, and that it is the same twice."""

from __future__ import annotations

import datetime as dt

import numpy as np
import pandas as pd
import pytest
from sqlalchemy import func, select, update

from tracker.assessment import profiles
from tracker.assessment.run import assess
from tracker.assessment.trace import unit_trace
from tracker.errors import InputError
from tracker.settings import AssessmentSettings
from tracker.store import results
from tracker.store.models import Assessment, UnitResult
from tracker.store.results import latest_assessment, ranking_page

DAY = 24
AIR = "read_at,air_temp_c"


def rows_of(database) -> dict[str, dict]:
    with database.reading() as connection:
        newest = latest_assessment(connection)
        return {row["unit_id"]: row for row in ranking_page(connection, newest.key).rows}


def counted_hours(database) -> list[float]:
    with database.reading() as connection:
        return list(connection.scalars(select(UnitResult.counted_hours)))


def fingerprint(database) -> str:
    assess(database)
    with database.reading() as connection:
        return latest_assessment(connection).data_fingerprint


def weather_csv(n_hour: int, freq: str = "h", station: str = "") -> str:
    stamps = pd.date_range("2025-07-01", periods=n_hour, freq=freq, tz="UTC")
    heading = f"station_id,{AIR}\n" if station else f"{AIR}\n"
    prefix = f"{station}," if station else ""
    return heading + "".join(
        f"{prefix}{stamp:%Y-%m-%dT%H:%MZ},{25 + stamp.hour % 12}\n" for stamp in stamps
    )


@pytest.fixture
def week(new_utility, made_store, tmp_path, hourly_csv):
    """One unit, T, with seven days of load and weather."""
    store = made_store(
        ("units", "unit_id,rated_kva\nT,25\n"),
        ("loads", hourly_csv("T", 15 + np.arange(7.0 * DAY) % 20)),
        ("weather", weather_csv(7 * DAY, station="FIELD")),
    )
    return new_utility(tmp_path, store)


def test_without_gaps_coverage_is_all(week) -> None:
    """The first 24 h warm the state up and count in no figure, but nobody is blamed for them."""
    assess(week.database)
    assert rows_of(week.database)["T"]["coverage_pct"] == pytest.approx(100.0, abs=1e-9)
    assert counted_hours(week.database) == [6 * DAY]


@pytest.mark.parametrize(
    ("what", "gap_h", "uncounted_h", "uncovered_h"),
    [
        ("load", 1, 0, 1),  # filled by a straight line: counted, and not measured
        *(("load", hours, hours, hours) for hours in (3, 10, 24)),
        *(("air", hours, 0, 0) for hours in (1, 3)),  # bridged by a straight line
        *(("air", hours, hours, hours) for hours in (4, 10, 24)),
        *((what, hours, hours + 24, hours + 24) for what in ("load", "air") for hours in (25, 40)),
    ],
)
def test_a_gap_lowers_coverage(utility, hourly_csv, what, gap_h, uncounted_h, uncovered_h) -> None:
    """A hole of more than 24 h also costs the 24 h that warm the state up anew. The load is constant,
    so that energy goes by hours."""
    load = np.full(7 * DAY, 20.0)
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    air = weather_csv(7 * DAY).splitlines(keepends=True)
    if what == "load":
        load[60 : 60 + gap_h] = np.nan
    else:
        del air[61 : 61 + gap_h]
    utility.take("loads", hourly_csv("T", load))
    utility.take("weather", "".join(air))
    assess(utility.database)
    assert counted_hours(utility.database) == [6 * DAY - uncounted_h]
    wanted = 100 * (6 * DAY - uncovered_h) / (6 * DAY)
    assert rows_of(utility.database)["T"]["coverage_pct"] == pytest.approx(wanted)


def test_a_gap_in_no_figure(utility, hourly_csv) -> None:
    """Over a gap the state is carried; nothing of it is counted as cool or hot."""
    load = np.full(5 * DAY, 20.0)
    utility.take("units", "unit_id,rated_kva\nT,25\nWHOLE,25\n")
    utility.take("loads", hourly_csv("WHOLE", load))
    load[50:60] = np.nan
    utility.take("loads", hourly_csv("T", load))
    utility.take("weather", weather_csv(5 * DAY))
    assess(utility.database)
    rows = rows_of(utility.database)
    assert rows["T"]["peak_hot_spot_c"] == pytest.approx(rows["WHOLE"]["peak_hot_spot_c"], abs=0.01)
    assert rows["T"]["aging_factor"] == pytest.approx(rows["WHOLE"]["aging_factor"], rel=0.1)


@pytest.mark.parametrize("station", ["", "ELSEWHERE"])
def test_without_weather_no_figure(utility, hourly_csv, station) -> None:
    """A temperature nobody measured must not be made up: none at all, or an unknown station."""
    utility.take("units", f"unit_id,rated_kva,weather_station\nT,25,{station}\n")
    utility.take("loads", hourly_csv("T", np.full(3 * DAY, 20.0)))
    if station:
        utility.take("weather", weather_csv(3 * DAY, station="HERE"))
    summary = assess(utility.database)
    row = rows_of(utility.database)["T"]
    assert summary.units_without_figures == 1
    assert row["coverage_pct"] == 0.0
    assert row["peak_hot_spot_c"] is row["aging_factor"] is row["peak_hot_spot_at"] is None


def test_two_stations_and_a_unit_that_names_none(utility, hourly_csv) -> None:
    """Contract: the default is the only station there is; with two there is no default."""
    utility.take("units", "unit_id,rated_kva,weather_station\nA,25,X\nB,25,\n")
    for unit in "AB":
        utility.take("loads", hourly_csv(unit, np.full(3 * DAY, 20.0)))
    utility.take("weather", weather_csv(3 * DAY, station="X"))
    utility.take("weather", weather_csv(3 * DAY, station="Y"))
    assess(utility.database)
    rows = rows_of(utility.database)
    assert rows["A"]["peak_hot_spot_c"] is not None
    assert rows["B"]["peak_hot_spot_c"] is None


def test_an_assessment_needs_load(utility) -> None:
    """An empty store is told what to do next."""
    with pytest.raises(InputError, match="Import units, connections and loads first"):
        assess(utility.database)


def test_a_unit_that_stood_nowhere_has_no_figures(week) -> None:
    """A spare in the yard is in the list, and cannot be judged."""
    week.take("units", "unit_id,rated_kva,site_id,removed_on\nOLD,25,YARD,2020-01-01\n")
    assess(week.database)
    row = rows_of(week.database)["OLD"]
    assert (row["peak_hot_spot_c"], row["coverage_pct"], row["site_id"]) == (None, 0.0, None)


# --- Aging belongs to the unit --------------------------------------------------------------------


def test_an_exchange_gives_each_unit_its_own_span(utility, hourly_csv) -> None:
    """Each has the site's load only while it stood there, on its own rating; hours by hand: eight
    days, exchanged after three, so 48 h and 96 h are counted after 24 h of warming up each."""
    utility.take(
        "units",
        "unit_id,rated_kva,site_id,installed_on,removed_on\n"
        "OLD,10,S,,2025-07-04\nNEW,50,S,2025-07-04,\n",
    )
    utility.take("connections", "meter_id,site_id\nM,S\n")
    load = hourly_csv("M", np.full(8 * DAY, 12.0), heading="meter_id,read_at,kva")
    utility.take("loads", load)
    utility.take("weather", weather_csv(8 * DAY))
    assess(utility.database)
    rows = rows_of(utility.database)
    assert counted_hours(utility.database) == [2 * DAY, 4 * DAY] or counted_hours(
        utility.database
    ) == [4 * DAY, 2 * DAY]
    assert rows["OLD"]["peak_load_pct"] == pytest.approx(120.0)
    assert rows["NEW"]["peak_load_pct"] == pytest.approx(24.0)
    assert rows["OLD"]["hours_over_rating"] == 2 * DAY
    assert rows["NEW"]["hours_over_rating"] == 0
    assert [rows[unit]["coverage_pct"] for unit in ("OLD", "NEW")] == [100.0, 100.0]
    assert rows["OLD"]["peak_hot_spot_at"] < dt.datetime(2025, 7, 4, tzinfo=dt.UTC)
    old = unit_trace(utility.database, "OLD")
    assert np.isfinite(old.load_kva).sum() == 3 * DAY
    assert old.counted.sum() == 2 * DAY


def test_a_moved_unit_has_the_load_of_both_its_places(utility, hourly_csv) -> None:
    """Heat goes with the unit: it is warm already when it is hung up again the same day."""
    utility.take(
        "units",
        "unit_id,rated_kva,site_id,installed_on,removed_on\n"
        "T,25,S-1,,2025-07-03\nT,25,S-2,2025-07-03,\n",
    )
    utility.take("connections", "meter_id,site_id\nA,S-1\nB,S-2\n")
    for meter, kva in (("A", 10.0), ("B", 20.0)):
        heading = "meter_id,read_at,kva"
        utility.take("loads", hourly_csv(meter, np.full(4 * DAY, kva), heading=heading))
    utility.take("weather", weather_csv(4 * DAY))
    assess(utility.database)
    trace = unit_trace(utility.database, "T")
    assert trace.load_kva.tolist() == [10.0] * 2 * DAY + [20.0] * 2 * DAY
    assert counted_hours(utility.database) == [3 * DAY]
    assert rows_of(utility.database)["T"]["site_id"] == "S-2"


# --- Intervals ------------------------------------------------------------------------------------


def test_quarter_hours_share_the_hourly_temperature(utility, hourly_csv) -> None:
    """Contract, section 2: a weather reading holds for its own interval."""
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    utility.take("loads", hourly_csv("T", np.full(3 * 96, 20.0), freq="15min"))
    utility.take("weather", weather_csv(3 * DAY))
    assess(utility.database)
    trace = unit_trace(utility.database, "T")
    assert trace.step_h == 0.25
    assert trace.air_temp_c.tolist() == [25 + hour % 12 for hour in range(72) for _ in range(4)]
    assert counted_hours(utility.database) == [2 * DAY]
    assert rows_of(utility.database)["T"]["coverage_pct"] == 100.0


def test_hourly_loads_with_half_hourly_weather(utility, hourly_csv) -> None:
    """Load is constant in its hour; the finer temperatures all count."""
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    utility.take("loads", hourly_csv("T", np.arange(3.0 * DAY)))
    air = "".join(
        f"2025-07-{1 + hour // 24:02d}T{hour % 24:02d}:{minute}Z,{20 + minute // 30}\n"
        for hour in range(3 * DAY)
        for minute in (00, 30)
    ).replace(":0Z", ":00Z")
    utility.take("weather", f"{AIR}\n{air}")
    assess(utility.database)
    trace = unit_trace(utility.database, "T")
    assert trace.step_h == 0.5
    assert trace.load_kva.tolist() == [hour for hour in range(72) for _ in range(2)]
    assert trace.air_temp_c.tolist() == [20.0, 21.0] * 72
    assert rows_of(utility.database)["T"]["coverage_pct"] == 100.0


def test_constant_quarter_hours_give_the_figures_of_hours(utility, hourly_csv) -> None:
    """The same load, cut finer, is the same heat."""
    utility.take("units", "unit_id,rated_kva\nH,25\nQ,25\n")
    hourly = 15.0 + np.arange(4 * DAY) % 17
    utility.take("loads", hourly_csv("H", hourly))
    utility.take("loads", hourly_csv("Q", np.repeat(hourly, 4), freq="15min"))
    utility.take("weather", weather_csv(4 * DAY))
    assess(utility.database, AssessmentSettings(time_constant="rated"))
    rows = rows_of(utility.database)
    for name in ("peak_hot_spot_c", "aging_factor", "hours_over_rating", "life_used_pct"):
        assert rows["Q"][name] == pytest.approx(rows["H"][name], rel=2e-3)


# --- The period -----------------------------------------------------------------------------------


def utc(day: int, hour: int = 0) -> dt.datetime:
    return dt.datetime(2025, 7, day, hour, tzinfo=dt.UTC)


@pytest.mark.parametrize(
    ("starts_at", "ends_at", "counted"),
    [
        (None, None, 6 * DAY),
        (utc(3), None, 4 * DAY),
        (None, utc(4), 2 * DAY),
        (utc(3, 5), utc(5, 5), DAY),
        (dt.datetime(2020, 1, 1, tzinfo=dt.UTC), dt.datetime(2030, 1, 1, tzinfo=dt.UTC), 6 * DAY),
    ],
)
def test_a_part_of_the_data(week, starts_at, ends_at, counted) -> None:
    """From a moment, to a moment (the end excluded), never beyond the data."""
    summary = assess(week.database, starts_at=starts_at, ends_at=ends_at)
    assert counted_hours(week.database) == [counted]
    assert rows_of(week.database)["T"]["coverage_pct"] == 100.0
    assert summary.period.starts_at == max(starts_at or utc(1), utc(1))
    assert summary.period.ends_at == min(ends_at or utc(8), utc(8))


@pytest.mark.parametrize(
    ("starts_at", "ends_at", "word"),
    [
        (utc(9), None, "no load is held in the period"),
        (None, utc(1), "no load is held in the period"),
        (utc(3), utc(3), "no load is held in the period"),
        (utc(3) + dt.timedelta(minutes=30), None, "not on the hour"),
    ],
)
def test_a_period_without_data_is_refused(week, starts_at, ends_at, word) -> None:
    """The message says what is held."""
    with pytest.raises(InputError, match=word):
        assess(week.database, starts_at=starts_at, ends_at=ends_at)


# --- The same twice -------------------------------------------------------------------------------


def test_two_runs_give_the_same_bits(summer) -> None:
    """Figures that change without reason are not believed."""
    before = rows_of(summer.database)
    assess(summer.database)
    assert rows_of(summer.database) == before


def test_the_fingerprint_changes_with_the_data_and_only_then(week, hourly_csv) -> None:
    """A stored result says whether it is of today's data."""
    seen = [fingerprint(week.database)]
    assert fingerprint(week.database) == seen[0]
    week.take("loads", hourly_csv("T", 15 + np.arange(7.0 * DAY) % 20))
    week.take("units", "unit_id,rated_kva\nT,25\n")
    assert fingerprint(week.database) == seen[0]
    changes = [
        ("loads", "unit_id,read_at,kva\nT,2025-07-03T00:00Z,15.5\n"),
        ("weather", f"station_id,{AIR}\nFIELD,2025-07-03T00:00Z,24.5\n"),
        ("units", "unit_id,rated_kva\nT,37.5\n"),
        ("units", "unit_id,rated_kva,installed_on\nT,37.5,2025-07-02\n"),
        ("units", "unit_id,rated_kva,weather_station\nT,37.5,NORTH\n"),
    ]
    for kind, text in changes:
        report = week.take(kind, text, interval=60) if kind != "units" else week.take(kind, text)
        assert report.fates.corrected == 1, text
        seen.append(fingerprint(week.database))
        assert len(set(seen)) == len(seen), text


def test_the_settings_are_stored_with_the_result(week) -> None:
    """What a figure was made with must be known as long as the figure."""
    settings = AssessmentSettings(time_constant="rated", hot_spot_limit_c=120.0, life_h=65_000.0)
    assess(week.database, settings)
    with week.database.reading() as connection:
        newest = latest_assessment(connection)
    assert AssessmentSettings(**newest.settings) == settings


@pytest.mark.parametrize("time_constant", ["corrected", "rated"])
def test_the_ranking_is_what_the_trace_shows(utility, hourly_csv, time_constant) -> None:
    """Whoever looks at a unit hour by hour must find the figures of the list again: the fleet
    kernel and the readable form are two programs."""
    rng = np.random.default_rng(7)
    utility.take("units", "unit_id,rated_kva,winding_rise_c\nA,25,55\nB,50,65\nC,25,\n")
    n_day = 20
    for unit, size in (("A", 34.0), ("B", 40.0), ("C", 30.0)):
        load = size * (0.4 + rng.random(n_day * DAY))
        load[rng.random(len(load)) < 0.02] = np.nan
        load[200 : 230 if unit == "C" else 205] = np.nan
        utility.take("loads", hourly_csv(unit, load))
    utility.take("weather", weather_csv(n_day * DAY))
    settings = AssessmentSettings(time_constant=time_constant, hot_spot_limit_c=115.0)
    assess(utility.database, settings)
    for unit, row in rows_of(utility.database).items():
        trace = unit_trace(utility.database, unit)
        on = trace.counted
        rated = row["rated_kva"]
        assert row["peak_hot_spot_c"] == pytest.approx(trace.hot_spot_c[on].max(), abs=0.01)
        at = trace.interval_start_s[on][trace.hot_spot_c[on].argmax()]
        assert row["peak_hot_spot_at"].timestamp() == at
        assert row["peak_top_oil_c"] == pytest.approx(trace.top_oil_c[on].max(), abs=0.01)
        assert row["peak_load_pct"] == pytest.approx(
            100 * trace.load_kva[on].max() / rated, rel=1e-5
        )
        assert row["hours_over_rating"] == (trace.load_kva[on] > rated).sum()
        assert row["hours_over_hot_spot_limit"] == (trace.hot_spot_c[on] > 115.0).sum()
        assert row["aging_factor"] == pytest.approx(trace.aging_factor[on].mean(), rel=2e-4)
        assert row["life_used_pct"] == pytest.approx(
            100 * trace.aging_factor[on].sum() / 180_000, rel=2e-4
        )


def test_a_part_of_a_trace_is_the_trace(summer) -> None:
    """Cutting out a day must not begin the thermal state anew."""
    whole = unit_trace(summer.database, "HOT")
    part = unit_trace(summer.database, "HOT", starts_at=utc(5), ends_at=utc(6))
    assert len(part.hot_spot_c) == DAY
    np.testing.assert_array_equal(part.hot_spot_c, whole.hot_spot_c[4 * DAY : 5 * DAY])
    np.testing.assert_array_equal(part.counted, whole.counted[4 * DAY : 5 * DAY])


def test_an_unknown_unit_is_refused(summer) -> None:
    """With the command that lists the known ones."""
    with pytest.raises(InputError, match="unit 'NOBODY' is not in the store"):
        unit_trace(summer.database, "NOBODY")


def test_an_interrupted_assessment_is_shown_to_nobody(week, monkeypatch) -> None:
    """Whoever opens the ranking sees the last whole run, and what was left lying is cleared away."""
    first = assess(week.database)

    def interrupted(*_: object) -> None:
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(results, "add_results", interrupted)
        with pytest.raises(KeyboardInterrupt):
            assess(week.database)
    with week.database.reading() as connection:
        assert latest_assessment(connection).key == first.key
    long_ago = dt.datetime.now(dt.UTC) - 2 * results.FORGOTTEN_AFTER
    with week.database.writing() as connection:
        unfinished = Assessment.finished_at.is_(None)
        connection.execute(update(Assessment).where(unfinished).values(made_at=long_ago))
    assess(week.database)
    with week.database.reading() as connection:
        assert connection.scalar(select(func.count()).select_from(Assessment)) == 2


def test_many_batches_make_one_assessment(week, monkeypatch) -> None:
    """Batches are read, unpacked and run beside each other; none is lost and none comes twice."""
    register = "unit_id,rated_kva\n" + "".join(f"U-{n},25\n" for n in range(11))
    week.take("units", week.file(register, "more.csv"))
    monkeypatch.setattr(profiles, "UNITS_A_BATCH", 2)
    summary = assess(week.database)
    assert summary.units == 12
    assert summary.units_without_figures == 11
    assert len(rows_of(week.database)) == 12
