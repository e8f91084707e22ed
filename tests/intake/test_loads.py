"""Interval readings in the long layout: stamps, quantities, quality, and what cannot be taken."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from sqlalchemy import select

from tracker.errors import InputError, IntakeError
from tracker.store.blocks import unpack
from tracker.store.models import IntakeFile, ReadingBlock, SupersededBlock

LONG = "meter_id,read_at,kwh\n"
ON_SITE = "meter_id,site_id\nM,S\n"


@pytest.fixture
def site(new_utility, made_store, tmp_path):
    """One site with one meter, M; a unit, T, that may be measured as a whole."""
    units = "unit_id,rated_kva,site_id\nT,25,S\n"
    return new_utility(tmp_path, made_store(("units", units), ("connections", ON_SITE)))


def stamped(stamps, values=None, meter: str = "M") -> str:
    values = np.ones(len(stamps)) if values is None else values
    return LONG + "".join(
        f"{meter},{stamp},{value}\n" for stamp, value in zip(stamps, values, strict=True)
    )


def starts(series: pd.Series) -> list[str]:
    return [f"{moment:%Y-%m-%dT%H:%M}" for moment in series.index]


# --- Quantities -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("heading", "options", "kva"),
    [
        ("kwh", {}, 4 * 3 / 0.95),  # 3 kWh in a quarter hour are 12 kW
        ("kw", {}, 3 / 0.95),
        ("kva", {}, 3.0),
        ("kwh", {"power_factor": 0.8}, 4 * 3 / 0.8),
        ("kw", {"power_factor": 1.0}, 3.0),
        ("kva", {"power_factor": 0.8}, 3.0),
    ],
)
@pytest.mark.parametrize("id_heading", ["meter_id", "unit_id"])
def test_quantities_become_kva(site, fates, heading, options, kva, id_heading) -> None:
    """Energy is divided by the interval, active power by the power factor; 0.95 unless said."""
    name = "M" if id_heading == "meter_id" else "T"
    rows = "".join(f"{name},2025-07-01T00:{minute:02d}Z,3\n" for minute in (0, 15, 30, 45))
    report = site.take("loads", f"{id_heading},read_at,{heading}\n{rows}", **options)
    assert fates(report) == (4, 0, 0, 0)
    np.testing.assert_allclose(site.site_load("S"), [kva] * 4, rtol=1e-6)
    assert site.problems() == []


def test_a_corrected_power_factor_derives_the_load_anew(site, fates) -> None:
    """The power factor is a setting of the series; changing it must reach what is held."""
    text = stamped(["2025-07-01T00:00Z", "2025-07-01T01:00Z"], [8, 8])
    site.take("loads", text)
    report = site.take("loads", text, power_factor=0.8)
    assert fates(report) == (0, 2, 0, 0)
    np.testing.assert_allclose(site.site_load("S"), 10.0, rtol=1e-6)


def test_kva_is_preferred_where_both_are_given(site) -> None:
    """What is measured stands before what is assumed; both are kept."""
    report = site.take(
        "loads",
        "meter_id,read_at,kwh,kva\nM,2025-07-01T00:00Z,3,5\nM,2025-07-01T01:00Z,3,5\n",
    )
    assert list(site.site_load("S")) == [5.0, 5.0]
    assert report.left_out == []
    assert site.readings("M", "kva").tolist() == [5.0, 5.0]
    assert site.readings("M", "kw").tolist() == [3.0, 3.0]


@pytest.mark.parametrize(("quantity", "kva"), [("kwh", 12 / 0.95), ("KW", 3 / 0.95), ("kva", 3.0)])
def test_the_cells_of_a_day_are_what_quantity_says(site, quantity, kva) -> None:
    """One row a day names no quantity in its headings."""
    headings = [f"{hour:02d}:{minute:02d}" for hour in range(24) for minute in (0, 15, 30, 45)]
    text = f"meter_id,date,{','.join(headings)}\nM,2025-07-01,{','.join(['3'] * 96)}\n"
    site.take("loads", text, timezone="UTC", quantity=quantity)
    np.testing.assert_allclose(site.site_load("S"), [kva] * 96, rtol=1e-6)


def test_an_unknown_quantity_is_refused(site) -> None:
    """A typing error must not end as kWh."""
    with pytest.raises(InputError, match="quantity = 'mwh' is not known; allowed: kva, kw, kwh"):
        site.take("loads", stamped(["2025-07-01T00:00Z"]), quantity="mwh")


# --- Stamps ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("step_min", [5, 10, 15, 20, 30, 60])
@pytest.mark.parametrize("how", ["found", "given"])
def test_the_interval_is_found_or_given(site, step_min, how) -> None:
    """Energy becomes power by the interval: a wrong one is wrong by a factor."""
    stamps = pd.date_range("2025-07-01", periods=13, freq=f"{step_min}min", tz="UTC")
    texts = [f"{stamp:%Y-%m-%dT%H:%MZ}" for stamp in stamps]
    if how == "given":
        texts = texts[:1]  # a single stamp tells nothing of its interval
    site.take(
        "loads", stamped(texts), interval=None if how == "found" else step_min, power_factor=1
    )
    np.testing.assert_allclose(site.site_load("S"), 60 / step_min, rtol=1e-6)
    assert len(site.site_load("S")) == len(texts)


def test_gaps_do_not_mislead_the_interval(site) -> None:
    """A meter that missed readings is still read every quarter hour."""
    minutes = [0, 15, 30, 90, 105, 150, 210, 225]
    stamps = [f"2025-07-01T{minute // 60:02d}:{minute % 60:02d}Z" for minute in minutes]
    site.take("loads", stamped(stamps), power_factor=1)
    assert site.readings("M").tolist() == [4.0] * len(minutes)


def test_rows_in_any_order_mean_the_same(site) -> None:
    """Some systems export newest first."""
    stamps = [f"2025-07-01T{hour:02d}:{minute:02d}Z" for hour in range(3) for minute in (0, 30)]
    site.take("loads", stamped(stamps[::-1], np.arange(6.0)[::-1]), power_factor=1)
    np.testing.assert_allclose(site.site_load("S"), 2 * np.arange(6.0))


def test_each_meter_has_its_own_interval(site) -> None:
    """Old hourly meters and new quarter-hour ones come in one file; they add up on one site."""
    site.take("connections", "meter_id,site_id\nQ,S\n")
    quarter = [f"2025-07-01T{h:02d}:{m:02d}Z" for h in range(2) for m in (0, 15, 30, 45)]
    text = stamped(quarter, np.arange(8.0), "Q") + stamped(
        ["2025-07-01T00:00Z", "2025-07-01T01:00Z"], [10, 20]
    ).removeprefix(LONG)
    site.take("loads", text, power_factor=1)
    wanted = 4 * np.arange(8.0) + np.repeat([10.0, 20.0], 4)
    np.testing.assert_allclose(site.site_load("S"), wanted, rtol=1e-6)


def test_one_reading_alone_tells_no_interval(site) -> None:
    """Guessing an hour would make a quarter hour's load a quarter of what it was."""
    with pytest.raises(IntakeError, match=r"interval length cannot be found.*--interval"):
        site.take("loads", stamped(["2025-07-01T00:00Z"]))


def test_one_reading_of_a_known_meter_takes_its_interval(site, fates) -> None:
    """Late readings come one at a time."""
    site.take("loads", stamped(["2025-07-01T00:00Z", "2025-07-01T00:15Z"]))
    assert fates(site.take("loads", stamped(["2025-07-01T00:30Z"]))) == (1, 0, 0, 0)
    assert site.readings("M").tolist() == [4.0, 4.0, 4.0]


@pytest.mark.parametrize("interval", [0, 7, 45, 90, -15])
def test_an_interval_that_meters_do_not_have_is_refused(site, interval) -> None:
    """The contract names the six lengths."""
    with pytest.raises(InputError, match=f"interval = {interval} min is not known"):
        site.take("loads", stamped(["2025-07-01T00:00Z"]), interval=interval)


@pytest.mark.parametrize("stamps", ["start", "end"])
def test_stamps_mark_the_start_or_the_end(site, stamps) -> None:
    """Both habits are common, and an hour's shift moves the peak against the heat."""
    site.take("loads", stamped(["2025-07-01T00:00Z", "2025-07-01T01:00Z"]), stamps=stamps)
    first = "2025-07-01T00:00" if stamps == "start" else "2025-06-30T23:00"
    assert starts(site.site_load("S"))[0] == first


def test_stamps_must_mark_one_or_the_other(site) -> None:
    """Anything else is a typing error."""
    with pytest.raises(InputError, match="stamps = 'middle' is not known; allowed: start, end"):
        site.take("loads", stamped(["2025-07-01T00:00Z"]), stamps="middle")


@pytest.mark.parametrize(
    "text",
    [
        "2025-07-01T05:00Z",
        "2025-07-01 05:00:00Z",
        "2025-07-01T00:00-05:00",
        "2025-07-01T00:00:00-0500",
        "2025-07-01T10:30+05:30",
        "20250701T050000Z",
        "2025-07-01T05:00:00.000Z",
        "  2025-07-01T05:00Z ",
        "2025-07-01T00:00",
        "2025-07-01 00:00:00",
    ],
)
def test_one_moment_in_many_spellings(site, text) -> None:
    """With an offset a stamp is taken as it is, even beside --timezone; without, it is local."""
    site.take("loads", stamped([text]), timezone="America/Chicago", interval=60)
    assert starts(site.site_load("S")) == ["2025-07-01T05:00"]


def test_local_stamps_need_a_zone(site) -> None:
    """Nobody can tell what time it was; the message names the option that says so."""
    with pytest.raises(IntakeError, match="--timezone"):
        site.take("loads", stamped(["2025-07-01T00:00", "2025-07-01T01:00"]))
    assert site.count(ReadingBlock) == 0


def test_an_unknown_zone_is_refused(site) -> None:
    """An abbreviation is no zone."""
    with pytest.raises(InputError, match="timezone = 'Central' is not known"):
        site.take("loads", stamped(["2025-07-01T00:00"]), timezone="Central")


def test_the_hour_that_spring_skips_is_refused(site, fates) -> None:
    """On 9 March 2025 Chicago's clocks went from 02:00 to 03:00."""
    stamps = [f"2025-03-09T{hour:02d}:00" for hour in range(5)]
    report = site.take("loads", stamped(stamps, range(5)), timezone="America/Chicago")
    assert fates(report) == (4, 0, 0, 1)
    (refusal,) = report.refusals
    assert (refusal.line, refusal.column, refusal.code) == (4, "read_at", "stamp.no_such_hour")
    assert starts(site.site_load("S")) == [f"2025-03-09T{hour:02d}:00" for hour in (6, 7, 8, 9)]


@pytest.mark.parametrize("step_min", [60, 15])
def test_the_hour_that_autumn_repeats_is_told_apart_by_order(site, fates, step_min) -> None:
    """On 2 November 2025 Chicago had the hour from 01:00 twice; every reading is its own."""
    utc = pd.date_range(
        "2025-11-02T05:00", periods=4 * 60 // step_min, freq=f"{step_min}min", tz="UTC"
    )
    local = [f"{moment.tz_convert('America/Chicago'):%Y-%m-%dT%H:%M}" for moment in utc]
    assert len(set(local)) < len(local)
    text = stamped(local, np.arange(float(len(local))))
    report = site.take("loads", text, timezone="America/Chicago", power_factor=1)
    assert fates(report) == (len(local), 0, 0, 0)
    load = site.site_load("S")
    assert list(load.index) == list(utc)
    np.testing.assert_allclose(load, np.arange(len(local)) * 60 / step_min, rtol=1e-6)
    again = site.take("loads", text, timezone="America/Chicago", power_factor=1)
    assert fates(again) == (0, len(local), 0, 0)


@pytest.mark.parametrize(
    ("stamp", "code"),
    [
        ("2025-07-01T02:07Z", "stamp.off_grid"),
        ("2025-07-01T02:30Z", "stamp.off_grid"),
        ("", "stamp.blank"),
        ("   ", "stamp.blank"),
        ("2025-07-01", "stamp.unreadable"),
        ("2025-13-01T00:00Z", "stamp.unreadable"),
        ("07/01/2025 02:00", "stamp.unreadable"),
        ("yesterday", "stamp.unreadable"),
        ("1925-07-01T02:00Z", "stamp.out_of_range"),
        ("9999-07-01T02:00Z", "stamp.future"),
        ("9999-12-31T23:59-14:00", "stamp.future"),
        ("0001-01-01T00:00+14:00", "stamp.out_of_range"),
    ],
)
def test_a_stamp_that_cannot_be_meant_is_refused(site, fates, stamp, code) -> None:
    """A reading in the wrong place of time is worse than none; the others are taken."""
    hours = [f"2025-07-01T{hour:02d}:00Z" for hour in range(6)]
    text = stamped(hours[:2]) + f"M,{stamp},1\n" + stamped(hours[2:]).removeprefix(LONG)
    report = site.take("loads", text)
    assert fates(report) == (6, 0, 0, 1)
    (refusal,) = report.refusals
    assert (refusal.line, refusal.column, refusal.code) == (4, "read_at", code)
    assert refusal.text == f"M,{stamp},1"


# --- Values ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("cell", "code"),
    [
        ("", "value.blank"),
        ("  ", "value.blank"),
        ("nan", "value.not_a_number"),
        ("inf", "value.not_a_number"),
        ("-Infinity", "value.not_a_number"),
        ("1e400", "value.not_a_number"),
        ("n/a", "value.not_a_number"),
        ('"1,25"', "value.not_a_number"),
        ("0x10", "value.not_a_number"),
        ("1e39", "value.out_of_range"),
        ("-99999999", "value.out_of_range"),
    ],
)
def test_a_value_that_is_no_number_is_refused(site, fates, cell, code) -> None:
    """None of these may reach a float32 and become a load."""
    text = LONG + f"M,2025-07-01T00:00Z,1\nM,2025-07-01T01:00Z,{cell}\nM,2025-07-01T02:00Z,1\n"
    report = site.take("loads", text, interval=60)
    assert fates(report) == (2, 0, 0, 1)
    (refusal,) = report.refusals
    assert (refusal.line, refusal.column, refusal.code) == (3, "kwh", code)
    assert refusal.text == text.splitlines()[2]
    assert len(site.readings("M")) == 2


@pytest.mark.parametrize("cell", ["0", "-0.0", "+1.5", "1e-3", " 2.5 ", "1e6", "-3"])
def test_numbers_however_written_are_taken(site, fates, cell) -> None:
    """Zero is a reading, and so is export."""
    text = stamped(["2025-07-01T00:00Z", "2025-07-01T01:00Z"], [cell, cell])
    assert fates(site.take("loads", text)) == (2, 0, 0, 0)
    np.testing.assert_allclose(site.readings("M"), [float(cell)] * 2, rtol=1e-6)


def test_negative_kva_is_refused(site, fates) -> None:
    """Apparent power has no direction; export is known by its active power."""
    text = "meter_id,read_at,kva\nM,2025-07-01T00:00Z,-1\nM,2025-07-01T01:00Z,1\n"
    assert fates(site.take("loads", text, interval=60)) == (1, 0, 0, 1)


@pytest.mark.parametrize(
    ("word", "code"),
    [
        ("measured", None),
        ("Estimated", None),
        ("", None),
        ("missing", "quality.missing"),
        ("E7", "quality.unknown"),
    ],
)
def test_quality_codes(site, fates, word, code) -> None:
    """An estimate is taken and remembered as one; a missing reading is no zero."""
    text = "meter_id,read_at,kwh,quality\n" + "".join(
        f"M,2025-07-01T{hour:02d}:00Z,1,{word}\n" for hour in range(2)
    )
    report = site.take("loads", text)
    if code is None:
        assert fates(report) == (2, 0, 0, 0)
        estimated = bool(site.site_flags("S").iloc[0] & 2)
        assert estimated == (word == "Estimated")
    else:
        assert fates(report) == (0, 0, 0, 2)
        assert {refusal.code for refusal in report.refusals} == {code}


def test_a_measured_reading_corrects_an_estimate_of_the_same_size(site, fates) -> None:
    """What is known of a value is part of it."""
    heading = "meter_id,read_at,kwh,quality\n"
    rows = "M,2025-07-01T00:00Z,1,{0}\nM,2025-07-01T01:00Z,1,{0}\n"
    site.take("loads", heading + rows.format("estimated"))
    assert fates(site.take("loads", heading + rows.format("measured"))) == (0, 0, 2, 0)
    assert list(site.site_flags("S")) == [1, 1]


@pytest.mark.parametrize("meter", ["", " ", "m" * 121])
def test_a_reading_of_nobody_is_refused(site, fates, meter) -> None:
    """Without an id it cannot be placed."""
    text = stamped(["2025-07-01T00:00Z", "2025-07-01T01:00Z"]) + f"{meter},2025-07-01T02:00Z,1\n"
    report = site.take("loads", text)
    assert fates(report) == (2, 0, 0, 1)
    assert report.refusals[0].column == "meter_id"


# --- Places in the file ---------------------------------------------------------------------------


@pytest.mark.parametrize("line_end", ["\n", "\r\n"])
@pytest.mark.parametrize("before", [0, 1, 3])
def test_line_numbers_are_those_an_editor_shows(site, fates, line_end, before) -> None:
    """Blank lines and quoted line breaks must not move the finger."""
    lines = [
        *[""] * before,
        "meter_id,read_at,kwh,note",
        "M,2025-07-01T00:00Z,1,",
        "",
        'M,2025-07-01T01:00Z,1,"two',
        'lines"',
        "M,2025-07-01T02:00Z,bad,",
        "",
        "M,2025-07-01T03:00Z,1",
        "M,2025-07-01T04:00Z,worse,",
    ]
    report = site.take("loads", site.file(line_end.join(lines) + line_end))
    assert fates(report) == (2, 0, 0, 3)
    assert [(each.line, each.code) for each in report.refusals] == [
        (before + 6, "value.not_a_number"),
        (before + 8, "row.columns"),
        (before + 9, "value.not_a_number"),
    ]
    assert report.refusals[0].text == "M,2025-07-01T02:00Z,bad,"


@pytest.mark.parametrize(
    "broken",
    [
        b'M,2025-07-01T01:00Z,"1"x',
        b"M,2025-07-01T01:00Z,1,2,3",
        b"M,2025-07-01T01:00Z",
        b"M,2025-07-01T01:00Z,1\xff",
        b'M,2025-07-01T01:00Z,1"',
    ],
    ids=["text after quote", "too many", "too few", "not utf-8", "stray quote"],
)
def test_a_broken_row_is_refused_and_the_rest_taken(site, fates, broken) -> None:
    """One bad row in a million must not cost the million, nor vanish."""
    good = [f"M,2025-07-01T{hour:02d}:00Z,1".encode() for hour in (0, 2, 3, 4)]
    bad_value = b"M,2025-07-01T05:00Z,x"
    content = b"\n".join([LONG.strip().encode(), good[0], broken, *good[1:], bad_value]) + b"\n"
    report = site.take("loads", site.file(content), timezone="UTC")
    assert fates(report) == (4, 0, 0, 2)
    assert [refusal.line for refusal in report.refusals] == [3, 7]
    assert len(site.readings("M")) == 4


def test_a_quote_inside_a_field_is_a_sign_like_any(site, fates) -> None:
    """An inch sign in an id opens nothing, and must not hide the refusals behind it."""
    text = stamped(["2025-07-01T00:00Z", "2025-07-01T01:00Z"], meter='M 3"') + "M,x,1\n"
    report = site.take("loads", text)
    assert fates(report) == (2, 0, 0, 1)
    assert [refusal.line for refusal in report.refusals] == [4]


def test_a_quote_that_is_never_closed_costs_its_row(site, fates) -> None:
    """Nothing behind it is swallowed: its row is reported, and the rows behind it stand by themselves."""
    hours = [f"2025-07-01T{hour:02d}:00Z" for hour in range(3)]
    report = site.take("loads", stamped(hours) + 'M,"2025-07-01T03:00Z,1\nM,x,1\n')
    assert fates(report) == (3, 0, 0, 2)
    assert [(each.line, each.code) for each in report.refusals] == [
        (5, "row.quotes"),
        (6, "stamp.unreadable"),
    ]


# --- Files as a whole -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("content", "word"),
    [
        (b"", "is empty"),
        (b"\n\n\n", "is empty"),
        (b"\xef\xbb\xbf", "is empty"),
        ("meter_id,read_at,kwh\nM,2025-07-01T00:00Z,1\n".encode("utf-16-le"), "as UTF-16 text"),
        (b"\x89PNG\r\n\x1a\n\0\0", "is not UTF-8"),
        (b"hello world\n", "are of no layout"),
        (b"meter_id,kwh\nM,1\n", "are of no layout"),
        (b"meter_id,unit_id,read_at,kwh\nM,T,2025-07-01T00:00Z,1\n", "are of no layout"),
        (b"meter_id,read_at,volts\nM,2025-07-01T00:00Z,1\n", "no column of values"),
        (b"meter_id,date,h01,h02\nM,2025-07-01,1,1\n", "2 interval columns"),
    ],
)
def test_a_file_that_is_none_is_refused_as_a_whole(site, content, word) -> None:
    """With a line that says what was found and what is allowed; and nothing in the ledger."""
    entries = site.count(IntakeFile)
    with pytest.raises(IntakeError, match=word):
        site.take("loads", site.file(content), timezone="UTC")
    assert site.count(IntakeFile) == entries


def test_headings_alone_are_a_file_of_nothing(site, fates) -> None:
    """A day without data is no error."""
    assert fates(site.take("loads", LONG)) == (0, 0, 0, 0)


def test_a_folder_or_a_missing_file_is_refused(site) -> None:
    """The commonest slips of all."""
    with pytest.raises(InputError, match="is not there"):
        site.take("loads", site.folder / "nowhere.csv")
    with pytest.raises(InputError, match="is a folder"):
        site.take("loads", site.folder)


@pytest.mark.parametrize("keep", [10, 0.5, 0.9])
def test_a_cut_gz_leaves_nothing(site, keep) -> None:
    """A transfer that broke off must not leave a part that looks like the whole."""
    rng = np.random.default_rng(1)
    stamps = pd.date_range("2025-01-01", periods=20_000, freq="h", tz="UTC")
    text = stamped([f"{stamp:%Y-%m-%dT%H:%MZ}" for stamp in stamps], rng.random(20_000).round(3))
    whole = site.file(text, "loads.csv.gz").read_bytes()
    cut = site.folder / "cut.csv.gz"
    cut.write_bytes(whole[: int(keep * len(whole)) if keep < 1 else keep])
    entries = site.count(IntakeFile)
    with pytest.raises(IntakeError):
        site.take("loads", cut)
    assert site.count(ReadingBlock) == 0
    assert site.count(IntakeFile) == entries


def test_a_dry_run_changes_nothing(site, fates) -> None:
    """It says the same as the real run, and leaves every byte of the store."""
    text = stamped(["2025-07-01T00:00Z", "2025-07-01T01:00Z", "x"])
    tables = {table: site.count(table) for table in (IntakeFile, ReadingBlock)}
    dry = site.take("loads", text, dry_run=True)
    assert {table: site.count(table) for table in tables} == tables
    assert fates(dry) == fates(site.take("loads", text)) == (2, 0, 0, 1)


# --- Overlaps, corrections, months ----------------------------------------------------------------


def test_overlapping_files_in_any_order_give_the_same_values(site) -> None:
    """Daily files that each bring a bit of the day before must not depend on their order."""
    hours = pd.date_range("2025-06-30T12:00", periods=36, freq="h", tz="UTC")
    values = np.arange(36.0)
    parts = [slice(0, 20), slice(10, 30), slice(24, 36)]
    texts = [
        stamped([f"{stamp:%Y-%m-%dT%H:%MZ}" for stamp in hours[part]], values[part])
        for part in parts
    ]
    for text in texts:
        site.take("loads", text, power_factor=1)
    forward = site.site_load("S")
    site.take("connections", "meter_id,site_id\nW,S-2\n")
    for text in reversed(texts):
        site.take("loads", text.replace("M,", "W,"), power_factor=1)
    pd.testing.assert_series_equal(forward, site.readings("W"))
    assert list(forward) == list(values)


def test_what_a_correction_replaces_is_remembered(site, fates) -> None:
    """An auditor asks what stood there before, and which file changed it."""
    hours = [f"2025-07-01T{hour:02d}:00Z" for hour in range(4)]
    site.take("loads", stamped(hours, [1, 2, 3, 4]))
    report = site.take("loads", stamped(hours, [1, 9, 3, 8]))
    assert fates(report) == (0, 2, 2, 0)
    assert list(site.readings("M")) == [1.0, 9.0, 3.0, 8.0]
    with site.database.reading() as connection:
        (row,) = connection.execute(select(SupersededBlock.payload, SupersededBlock.replaced_by))
        newest = connection.scalar(select(IntakeFile.id).order_by(IntakeFile.id.desc()).limit(1))
    values, flags = unpack([row.payload])
    assert values[0][flags[0] != 0].tolist() == [2.0, 4.0]
    assert row.replaced_by == newest


def test_a_reading_twice_in_one_file_ends_as_the_later(site, fates) -> None:
    """A later reading replaces an earlier one, inside a file as between files."""
    text = stamped([*["2025-07-01T00:00Z"] * 3, "2025-07-01T01:00Z"], [1, 1, 2, 5])
    assert fates(site.take("loads", text)) == (2, 1, 1, 0)
    assert list(site.readings("M")) == [2.0, 5.0]


@pytest.mark.parametrize("step_min", [15, 60])
def test_readings_across_months_and_years(site, step_min) -> None:
    """Blocks are cut by the month in UTC; nothing may be lost or doubled at the seams."""
    stamps = pd.date_range("2024-12-30", "2025-03-03", freq=f"{step_min}min", tz="UTC")
    values = np.arange(float(len(stamps))) / len(stamps)
    site.take(
        "loads", stamped([f"{stamp:%Y-%m-%dT%H:%MZ}" for stamp in stamps], values), power_factor=1
    )
    load = site.site_load("S")
    assert list(load.index) == list(stamps)
    np.testing.assert_allclose(load, values * 60 / step_min, rtol=1e-6)


@pytest.mark.parametrize("zone", ["Asia/Kolkata", "Asia/Kathmandu"])
def test_hours_of_a_zone_off_the_hour_keep_their_energy(site, fates, zone) -> None:
    """Hours that begin at half or quarter past in UTC are split, not shifted."""
    local = pd.date_range("2025-07-01", periods=48, freq="h")
    values = np.arange(48.0)
    text = stamped([f"{stamp:%Y-%m-%dT%H:%M}" for stamp in local], values)
    report = site.take("loads", text, timezone=zone, power_factor=1)
    assert fates(report) == (48, 0, 0, 0)
    load = site.site_load("S")
    step_h = (load.index[1] - load.index[0]).total_seconds() / 3600
    assert load.sum() * step_h == pytest.approx(values.sum(), rel=1e-6)
    by_hour = load.tz_convert(zone).resample("h").mean()
    np.testing.assert_allclose(by_hour, values, rtol=1e-6)
    assert fates(site.take("loads", text, timezone=zone, power_factor=1)) == (0, 48, 0, 0)
    assert site.problems() == []


@pytest.mark.parametrize("finer_first", [True, False])
def test_coarser_and_finer_readings_of_one_month(site, fates, finer_first) -> None:
    """A meter that was set from hours to quarter hours in mid-month keeps both."""
    hourly = stamped([f"2025-07-01T{hour:02d}:00Z" for hour in range(4)], [4, 8, 12, 16])
    quarter = stamped(
        [f"2025-07-01T{hour:02d}:{minute:02d}Z" for hour in (4, 5) for minute in (0, 15, 30, 45)],
        [1, 2, 3, 4, 5, 6, 7, 8],
    )
    for text in (quarter, hourly) if finer_first else (hourly, quarter):
        site.take("loads", text, power_factor=1)
    wanted = [*np.repeat([4.0, 8.0, 12.0, 16.0], 4), *(4 * np.arange(1.0, 9.0))]
    np.testing.assert_allclose(site.site_load("S"), wanted, rtol=1e-6)
    for text in (hourly, quarter):
        assert fates(site.take("loads", text, power_factor=1))[1] in (4, 8)
    np.testing.assert_allclose(site.site_load("S"), wanted, rtol=1e-6)
    assert site.problems() == []


def test_hours_over_quarter_hours_are_a_correction_that_is_remembered(site, fates) -> None:
    """An hourly total that differs from its quarters replaces all four of them."""
    quarter = stamped([f"2025-07-01T00:{minute:02d}Z" for minute in (0, 15, 30, 45)], [1, 2, 3, 4])
    site.take("loads", quarter, power_factor=1)
    hourly = stamped(["2025-07-01T00:00Z", "2025-07-01T01:00Z"], [20, 30])
    assert fates(site.take("loads", hourly, power_factor=1)) == (1, 0, 1, 0)
    np.testing.assert_allclose(site.site_load("S"), [20.0] * 4 + [30.0] * 4)
    assert site.problems() == []


def test_the_ledger_notes_every_file(site) -> None:
    """What was read, how it was meant, and what became of it."""
    site.take("loads", stamped(["2025-07-01T00:00", "2025-07-01T01:00"]), timezone="Asia/Kolkata")
    with site.database.reading() as connection:
        row = connection.execute(select(IntakeFile).order_by(IntakeFile.id.desc()).limit(1)).one()
    assert (row.kind, row.readings, row.taken, row.refused) == ("loads", 2, 2, 0)
    assert row.options["timezone"] == "Asia/Kolkata"
    assert len(row.fingerprint) == 32
