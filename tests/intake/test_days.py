"""Interval readings with one row a day, in local order from midnight."""

from __future__ import annotations

import itertools

import numpy as np
import pandas as pd
import pytest

from tracker.errors import IntakeError

CHICAGO = "America/Chicago"
SPRING, AUTUMN, ORDINARY = "2025-03-09", "2025-11-02", "2025-07-01"


@pytest.fixture
def site(new_utility, made_store, tmp_path):
    """One site with one meter, M, behind a unit that may carry whatever the tests bring."""
    units, connections = "unit_id,rated_kva,site_id\nT,10000,S\n", "meter_id,site_id\nM,S\n"
    return new_utility(tmp_path, made_store(("units", units), ("connections", connections)))


def hour_names(n: int) -> list[str]:
    return [f"h{hour:02d}" for hour in range(1, n + 1)]


def clock_names(step_min: int) -> list[str]:
    return [f"{m // 60:02d}:{m % 60:02d}" for m in range(0, 24 * 60, step_min)]


def days(headings: list[str], rows: dict[str, list[object]], who: str = "meter_id,M") -> str:
    heading, name = who.split(",")
    lines = [",".join([heading, "date", *headings])]
    lines += [",".join([name, date, *map(str, cells)]) for date, cells in rows.items()]
    return "\n".join(lines) + "\n"


@pytest.mark.parametrize(
    ("headings", "step_min"),
    [
        (hour_names(24), 60),
        (hour_names(25), 60),
        ([name.upper() for name in hour_names(24)], 60),
        (clock_names(60), 60),
        (clock_names(30), 30),
        ([f"h{place}" for place in range(1, 49)], 30),
        (clock_names(20), 20),
        (clock_names(15), 15),
        ([*clock_names(15), *(f"h{place}" for place in range(97, 101))], 15),
        ([f"{name}:00" for name in clock_names(15)], 15),
        (clock_names(10), 10),
        (clock_names(5), 5),
    ],
    ids=lambda value: f"{len(value)} {value[0]}" if isinstance(value, list) else None,
)
def test_any_number_of_columns_that_makes_a_day(site, fates, headings, step_min) -> None:
    """Each cell is the energy of its interval, counted from local midnight."""
    n = 24 * 60 // step_min
    cells = [*range(n), *[""] * (len(headings) - n)]
    report = site.take("loads", days(headings, {ORDINARY: cells}), timezone=CHICAGO, power_factor=1)
    assert fates(report) == (n, 0, 0, 0)
    assert report.left_out == []
    wanted = pd.date_range("2025-07-01", periods=n, freq=f"{step_min}min", tz=CHICAGO)
    load = site.site_load("S")
    assert list(load.index) == list(wanted)
    np.testing.assert_allclose(load, np.arange(n) * 60 / step_min, rtol=1e-6)


def test_rows_of_a_unit_are_taken_too(utility, fates) -> None:
    """Load already summed at the transformer comes in the same layout."""
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    text = days(hour_names(24), {ORDINARY: [7] * 24}, "unit_id,T")
    assert fates(utility.take("loads", text, timezone="UTC", quantity="kva")) == (24, 0, 0, 0)
    assert list(utility.site_load("T")) == [7.0] * 24


@pytest.mark.parametrize("step_min", [60, 15])
@pytest.mark.parametrize(("date", "hours"), [(SPRING, 23), (ORDINARY, 24), (AUTUMN, 25)])
def test_days_of_23_24_and_25_hours(site, fates, step_min, date, hours) -> None:
    """Contract: a short day leaves its last columns blank, a long one fills the extra hour's."""
    n_column, n_cell = 25 * 60 // step_min, hours * 60 // step_min
    headings = [f"h{place:02d}" for place in range(1, n_column + 1)]
    cells = [*range(n_cell), *[""] * (n_column - n_cell)]
    text = days(headings, {date: cells})
    report = site.take("loads", text, timezone=CHICAGO, power_factor=1)
    assert fates(report) == (n_cell, 0, 0, 0)
    load = site.site_load("S")
    midnight = pd.Timestamp(date, tz=CHICAGO).tz_convert("UTC")
    assert list(load.index) == list(
        pd.date_range(midnight, periods=n_cell, freq=f"{step_min}min", tz="UTC")
    )
    np.testing.assert_allclose(load, np.arange(n_cell) * 60 / step_min, rtol=1e-6)
    assert fates(site.take("loads", text, timezone=CHICAGO, power_factor=1)) == (0, n_cell, 0, 0)


@pytest.mark.parametrize(("date", "hours"), [(SPRING, 23), (ORDINARY, 24)])
def test_an_hour_that_the_day_does_not_have_is_refused(site, fates, date, hours) -> None:
    """Taken, it would fall into the next day and be corrected by it."""
    report = site.take("loads", days(hour_names(25), {date: [1] * 25}), timezone=CHICAGO)
    assert fates(report) == (hours, 0, 0, 25 - hours)
    assert {refusal.code for refusal in report.refusals} == {"date.too_many_hours"}
    assert {refusal.column for refusal in report.refusals} == set(hour_names(25)[hours:])


def test_blank_cells_count_as_nothing(site, fates) -> None:
    """Contract: the four fates add up to the cells that are not blank."""
    cells: list[object] = list(range(24))
    cells[3], cells[10], cells[23] = "", "  ", ""
    report = site.take("loads", days(hour_names(24), {ORDINARY: cells}), timezone="UTC")
    assert fates(report) == (21, 0, 0, 0)
    assert len(site.readings("M")) == 21


def test_bad_cells_are_refused_one_by_one(site, fates) -> None:
    """With line and column, as a spreadsheet shows them."""
    cells: list[object] = [1] * 24
    cells[2], cells[5], cells[7], cells[9] = "x", "nan", "inf", "1e400"
    text = days(hour_names(24), {"2025-07-01": [1] * 24, "2025-07-02": cells})
    report = site.take("loads", text, timezone="UTC")
    assert fates(report) == (44, 0, 0, 4)
    assert [(refusal.line, refusal.column, refusal.code) for refusal in report.refusals] == [
        (3, name, "value.not_a_number") for name in ("h03", "h06", "h08", "h10")
    ]


@pytest.mark.parametrize(
    ("who", "date", "code"),
    [
        ("meter_id,M", "2025-02-30", "date.unreadable"),
        ("meter_id,M", "07/01/2025", "date.unreadable"),
        ("meter_id,M", "", "stamp.blank"),
        ("meter_id,M", "1815-06-18", "stamp.out_of_range"),
        ("meter_id,M", "9999-12-31", "stamp.out_of_range"),
        ("meter_id,", "2025-07-01", "id.blank"),
        ("meter_id," + "m" * 121, "2025-07-01", "id.too_long"),
    ],
)
def test_a_day_that_cannot_be_placed_refuses_its_cells(site, fates, who, date, code) -> None:
    """Each cell is a reading, so each is refused; blank ones are none."""
    cells = [*[1] * 23, ""]
    text = days(hour_names(24), {date: cells}, who) + "M,2025-07-05," + "1," * 23 + "\n"
    report = site.take("loads", text, timezone="UTC")
    assert fates(report) == (23, 0, 0, 23)
    assert {(refusal.line, refusal.code) for refusal in report.refusals} == {(2, code)}


@pytest.mark.parametrize(
    ("n", "options", "word"),
    [
        (23, {}, "23 interval columns are not those of a day"),
        (26, {}, "26 interval columns"),
        (24, {"interval": 15}, "24 interval columns are not those of a day of 15 min"),
    ],
)
def test_columns_that_make_no_day_stop_the_file(site, n, options, word) -> None:
    """A column lost in an export would shift all that follow."""
    with pytest.raises(IntakeError, match=word):
        site.take("loads", days(hour_names(n), {ORDINARY: [1] * n}), timezone="UTC", **options)


def test_the_zone_must_be_named(site) -> None:
    """A day begins at local midnight, wherever that is."""
    with pytest.raises(IntakeError, match="--timezone"):
        site.take("loads", days(hour_names(24), {ORDINARY: [1] * 24}))


def test_a_year_of_days_loses_nothing(site, fates) -> None:
    """Both changes of the clock, and every month, in one file."""
    midnights = pd.date_range("2025-01-01", "2026-01-01", freq="D", tz=CHICAGO)
    rows: dict[str, list[object]] = {}
    reading = 0
    for midnight, following in itertools.pairwise(midnights):
        hours = round((following - midnight).total_seconds() / 3600)
        rows[f"{midnight:%Y-%m-%d}"] = [*range(reading, reading + hours), *[""] * (25 - hours)]
        reading += hours
    text = days(hour_names(25), rows)
    assert fates(site.take("loads", text, timezone=CHICAGO, power_factor=1)) == (8760, 0, 0, 0)
    assert site.site_load("S").tolist() == list(range(8760))


def test_frames_of_days_are_taken(site, fates) -> None:
    """Notebooks hold dates as timestamps."""
    frame = pd.DataFrame({"meter_id": ["M"], "date": [pd.Timestamp("2025-07-01")]})
    frame[hour_names(24)] = 1.0
    assert fates(site.take("loads", frame, timezone="UTC")) == (24, 0, 0, 0)
