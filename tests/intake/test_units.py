"""The register of units: what a utility's file may look like, and what is refused of it."""

from __future__ import annotations

import datetime as dt

import pandas as pd
import pytest
from sqlalchemy import select

from tracker.errors import IntakeError
from tracker.store import fleet
from tracker.store.models import IntakeRefusal, Placement, Site, Unit

#: A cell for every heading of the contract, and what the store holds of it.
CELLS = {
    "unit_id": ("T-1", "T-1"),
    "rated_kva": ("37.5", 37.5),
    "feeder": ("LK-11 Saltmarsh", "LK-11 Saltmarsh"),
    "site_id": ("S-1", "S-1"),
    "installed_on": ("2001-05-06", dt.datetime(2001, 5, 6, tzinfo=dt.UTC)),
    "removed_on": ("2031-05-06", dt.datetime(2031, 5, 6, tzinfo=dt.UTC)),
    "phases": ("3", 3),
    "hv_volts": ("12470", 12470.0),
    "lv_volts": ("208", 208.0),
    "impedance_pct": ("2.1", 2.1),
    "winding_rise_c": ("55", 55.0),
    "cooling": ("onaf", "ONAF"),
    "mounting": ("Pad", "pad"),
    "year_made": ("1978", 1978),
    "no_load_loss_w": ("80", 80.0),
    "load_loss_w": ("410.5", 410.5),
    "latitude": ("-12.5", -12.5),
    "longitude": ("179.25", 179.25),
    "customers": ("7", 7),
    "critical_customers": ("1", 1),
    "weather_station": ("FIELD", "FIELD"),
    "loss_ratio": ("4.5", 4.5),
    "top_oil_rise_c": ("45", 45.0),
    "hot_spot_rise_c": ("65", 65.0),
    "oil_exponent": ("0.9", 0.9),
    "winding_exponent": ("0.85", 0.85),
    "top_oil_time_constant_h": ("5.5", 5.5),
    "winding_time_constant_h": ("0.1", 0.1),
}


def held(utility) -> dict[str, object]:
    """Return all that is held of the first unit, its site and its placement."""
    with utility.database.reading() as connection:
        (unit, *_), (site, *_) = fleet.units(connection), fleet.sites(connection)
        (stay, *_) = fleet.placements(connection)
    return {
        **site,
        **unit,
        "installed_on": stay.span.starts_at,
        "removed_on": stay.span.ends_at,
    }


def stays(utility) -> list[tuple[str, str, str, str]]:
    """Return (unit, site, from, to) of every placement, as dates."""
    query = (
        select(Unit.unit_id, Site.site_id, Placement.starts_at, Placement.ends_at)
        .select_from(Placement)
        .join(Unit, Unit.id == Placement.unit_key)
        .join(Site, Site.id == Placement.site_key)
    )
    with utility.database.reading() as connection:
        rows = connection.execute(query).all()
    return sorted(
        (row[0], row[1], *("" if moment is None else f"{moment:%Y-%m-%d}" for moment in row[2:]))
        for row in rows
    )


def register(headings, cells, separator: str = ",") -> str:
    return separator.join(headings) + "\n" + separator.join(cells) + "\n"


def all_cells() -> tuple[list[str], list[str]]:
    return list(CELLS), [cell for cell, _ in CELLS.values()]


def test_every_column_of_the_contract_is_held(utility, fates) -> None:
    """A column that is read past without a word makes a default of a given figure."""
    report = utility.take("units", register(*all_cells()))
    assert fates(report) == (1, 0, 0, 0)
    assert report.left_out == []
    found = held(utility)
    assert {name: found[name] for name in CELLS} == {
        name: kept for name, (_, kept) in CELLS.items()
    }


@pytest.mark.parametrize(
    "spelled",
    [
        lambda heading: heading.upper(),
        lambda heading: heading.replace("_", " ").title(),
        lambda heading: heading.replace("_", ""),
        lambda heading: f"  {heading} ",
        lambda heading: "".join(part.title() for part in heading.split("_")),
    ],
    ids=["upper", "words", "joined", "padded", "camel"],
)
def test_headings_are_matched_however_they_are_spelled(utility, fates, spelled) -> None:
    """Exports of other systems spell headings their own way; the contract passes over case,
    spaces and underscores."""
    headings, cells = all_cells()
    report = utility.take("units", register([spelled(heading) for heading in headings], cells))
    assert fates(report) == (1, 0, 0, 0)
    assert report.left_out == []
    assert held(utility)["winding_time_constant_h"] == 0.1


@pytest.mark.parametrize(
    "content",
    [
        register(*all_cells()).encode("utf-8-sig"),
        register(*all_cells(), ";").encode(),
        register(*all_cells(), "\t").encode(),
        register(*all_cells()).replace("\n", "\r\n").encode(),
        ('"' + register(*all_cells(), '","').replace("\n", '"\n"')[:-1]).encode(),
        b"\n\n  \n" + register(*all_cells()).encode(),
        register(*all_cells()).rstrip("\n").encode(),
        b"\xef\xbb\xbf" + register(*all_cells(), ";").replace("\n", "\r\n").encode(),
    ],
    ids=[
        *("mark", "semicolon", "tab", "crlf", "quoted", "blank lines first", "no last newline"),
        "spreadsheet",
    ],
)
@pytest.mark.parametrize("name", ["units.csv.gz", "odd [name]* ü'.csv"])
def test_every_kind_of_csv_is_read(utility, fates, content, name) -> None:
    """Contract, section 1: no CSV ever has to be edited for its separators, marks or ends."""
    report = utility.take("units", utility.file(content, name))
    assert fates(report) == (1, 0, 0, 0)
    assert held(utility)["feeder"] == "LK-11 Saltmarsh"
    assert held(utility)["winding_time_constant_h"] == 0.1


def test_quoted_fields_may_hold_separators_quotes_and_line_breaks(utility, fates) -> None:
    """Feeder names are free text."""
    report = utility.take(
        "units", 'unit_id,rated_kva,feeder\nT-1,25,"Mill, ""Old""\nNorth"\nT-2,25,x\n'
    )
    assert fates(report) == (2, 0, 0, 0)
    assert held(utility)["feeder"] == 'Mill, "Old"\nNorth'


def test_extra_columns_are_named_and_no_error(utility, fates) -> None:
    """A misspelled heading must be seen, or a given figure is silently assumed."""
    report = utility.take("units", "unit_id,paint,rated_kva,serial no\nT-1,grey,25,77\n")
    assert fates(report) == (1, 0, 0, 0)
    assert report.left_out == ["paint", "serial no"]


@pytest.mark.parametrize("missing", ["unit_id", "rated_kva"])
def test_a_missing_required_heading_stops_the_file(utility, missing) -> None:
    """Without it no row means anything."""
    headings = [heading for heading in ("unit_id", "rated_kva", "feeder") if heading != missing]
    with pytest.raises(IntakeError, match=f"heading {missing} is missing; found {headings[0]}"):
        utility.take("units", register(headings, ["x", "25"]))
    assert utility.count(Unit) == 0


def test_a_heading_that_stands_twice_stops_the_file(utility) -> None:
    """Which of two rated_kva columns would be meant is anybody's guess."""
    with pytest.raises(IntakeError, match="'rated_kva' stands twice in line 1"):
        utility.take("units", "unit_id,rated_kva,Rated kVA\nT-1,25,50\n")


BAD_CELLS = [
    ("unit_id", "", "unit_id.blank"),
    ("unit_id", "x" * 121, "unit_id.too_long"),
    ("rated_kva", "", "rated_kva.blank"),
    ("rated_kva", "0", "rated_kva.not_allowed"),
    ("rated_kva", "-25", "rated_kva.not_allowed"),
    ("rated_kva", "nan", "rated_kva.not_allowed"),
    ("rated_kva", "inf", "rated_kva.not_allowed"),
    ("rated_kva", "1e400", "rated_kva.not_allowed"),
    ("rated_kva", "25 kVA", "rated_kva.not_allowed"),
    ("phases", "2", "phases.not_allowed"),
    ("phases", "1.5", "phases.not_allowed"),
    ("winding_rise_c", "60", "winding_rise_c.not_allowed"),
    ("cooling", "water", "cooling.unknown"),
    ("mounting", "roof", "mounting.unknown"),
    ("year_made", "1978.5", "year_made.not_allowed"),
    ("year_made", "78", "year_made.not_allowed"),
    ("installed_on", "2025-02-30", "installed_on.no_date"),
    ("installed_on", "01/02/2025", "installed_on.no_date"),
    ("installed_on", "20250102", "installed_on.no_date"),
    ("latitude", "91", "latitude.not_allowed"),
    ("customers", "-1", "customers.not_allowed"),
    ("loss_ratio", "0", "loss_ratio.not_allowed"),
    ("oil_exponent", "2.5", "oil_exponent.not_allowed"),
    ("top_oil_time_constant_h", "-3", "top_oil_time_constant_h.not_allowed"),
]


@pytest.mark.parametrize(("heading", "cell", "code"), BAD_CELLS)
def test_a_bad_cell_refuses_its_row_alone(utility, fates, heading, cell, code) -> None:
    """A person mending the file needs file, line, column, a code, a reason and the text."""
    bad = {"unit_id": "BAD", "rated_kva": "25"} | {heading: cell}
    headings = list(dict.fromkeys(["unit_id", "rated_kva", heading]))
    rows = [headings, ["GOOD-1", "25", ""], [bad[name] for name in headings], ["GOOD-2", "25", ""]]
    text = "\n".join(",".join(row[: len(headings)]) for row in rows) + "\n"
    report = utility.take("units", text)
    assert fates(report) == (2, 0, 0, 1)
    (refusal,) = report.refusals
    assert (refusal.file, refusal.line, refusal.column) == (
        str(utility.folder / "file.csv"),
        3,
        heading,
    )
    assert refusal.code == code
    assert heading in refusal.reason
    assert refusal.text == text.splitlines()[2]
    assert utility.count(Unit) == 2
    assert utility.count(IntakeRefusal) == 1


def test_several_bad_cells_are_one_refused_row(utility, fates) -> None:
    """The fates count rows: one row is refused once."""
    report = utility.take("units", "unit_id,rated_kva,phases\n,0,2\nT-1,25,1\n")
    assert fates(report) == (1, 0, 0, 1)


@pytest.mark.parametrize(
    ("headings", "cells"),
    [
        (["hot_spot_rise_c", "top_oil_rise_c"], ["50", "55"]),
        (["hot_spot_rise_c", "top_oil_rise_c"], ["55", "55"]),
        (["hot_spot_rise_c"], ["50"]),  # below the assumed 53 K of a 25 kVA unit
        (["top_oil_rise_c"], ["80"]),  # above the assumed 80 K hot spot
    ],
)
def test_a_hot_spot_cooler_than_its_oil_is_refused(utility, fates, headings, cells) -> None:
    """Both are over ambient; a hot spot below the top oil has no gradient at all."""
    text = register(["unit_id", "rated_kva", *headings], ["T-1", "25", *cells])
    report = utility.take("units", text + "T-2,25" + "," * len(cells) + "\n")
    assert fates(report) == (1, 0, 0, 1)
    assert report.refusals[0].code == "hot_spot_rise_c.too_low"
    assert report.refusals[0].line == 2


def test_a_second_import_changes_nothing(utility, fates) -> None:
    """Nightly jobs send the same register every night."""
    text = register(*all_cells())
    utility.take("units", text)
    before = held(utility)
    assert fates(utility.take("units", text)) == (0, 1, 0, 0)
    assert held(utility) == before
    assert utility.count(Placement) == 1


def test_a_changed_nameplate_is_a_correction(utility, fates) -> None:
    """A nameplate read better later must reach the figures."""
    utility.take("units", "unit_id,rated_kva\nT-1,25\nT-2,25\n")
    report = utility.take("units", "unit_id,rated_kva\nT-1,37.5\nT-2,25\n")
    assert fates(report) == (0, 1, 1, 0)
    assert held(utility)["rated_kva"] == 37.5


def test_columns_a_file_does_not_have_are_left_as_they_are(utility, fates) -> None:
    """A short list of re-rated units must not wipe out feeders and nameplates."""
    utility.take("units", "unit_id,rated_kva,feeder,hv_volts\nT-1,25,LK-11,7200\n")
    report = utility.take("units", "unit_id,rated_kva\nT-1,25\n")
    assert fates(report) == (0, 1, 0, 0)
    assert (held(utility)["feeder"], held(utility)["hv_volts"]) == ("LK-11", 7200.0)
    report = utility.take("units", "unit_id,rated_kva,hv_volts\nT-1,25,\n")
    assert fates(report) == (0, 0, 1, 0)
    assert (held(utility)["feeder"], held(utility)["hv_volts"]) == ("LK-11", None)


def test_the_same_row_twice_is_unchanged(utility, fates) -> None:
    """A file joined of two exports may say the same thing twice."""
    assert fates(utility.take("units", "unit_id,rated_kva\nT-1,25\nT-1,25\n")) == (1, 1, 0, 0)


def test_a_unit_with_two_nameplates_in_one_file_is_refused(utility, fates) -> None:
    """Which of 25 and 50 kVA is right cannot be told from the order of the rows."""
    report = utility.take("units", "unit_id,rated_kva\nT-1,25\nT-1,50\n")
    assert fates(report) == (1, 0, 0, 1)
    assert held(utility)["rated_kva"] == 25.0
    assert (report.refusals[0].line, report.refusals[0].code) == (3, "rated_kva.two_values")


def test_a_blank_cell_contradicts_nothing(utility, fates) -> None:
    """A unit that moved has two rows, and often a nameplate in one of them only."""
    text = (
        "unit_id,rated_kva,site_id,installed_on,removed_on,hv_volts\n"
        "T-1,25,S-2,2025-07-10,,\nT-1,25,S-1,2020-01-01,2025-07-10,7200\n"
    )
    assert fates(utility.take("units", text)) == (2, 0, 0, 0)
    assert held(utility)["hv_volts"] == 7200.0
    assert fates(utility.take("units", text)) == (0, 2, 0, 0)


# --- Who stands where -----------------------------------------------------------------------------

PLACED = "unit_id,rated_kva,site_id,installed_on,removed_on\n"


def test_a_unit_without_site_stands_at_one_of_its_own_name(utility) -> None:
    """Many utilities number units, not places."""
    utility.take("units", "unit_id,rated_kva\nT-1,25\n")
    assert stays(utility) == [("T-1", "T-1", "", "")]


OLD, NEW = "OLD,25,S,,2025-07-10\n", "NEW,50,S,2025-07-10,\n"


@pytest.mark.parametrize("rows", [OLD + NEW, NEW + OLD], ids=["old first", "new first"])
@pytest.mark.parametrize("held_before", [True, False])
def test_an_exchange_is_taken_in_either_order(utility, fates, rows, held_before) -> None:
    """Registers are sorted by number, not by what happened first."""
    if held_before:
        utility.take("units", PLACED + "OLD,25,S,,\n")
    report = utility.take("units", PLACED + rows)
    assert fates(report) == ((1, 0, 1, 0) if held_before else (2, 0, 0, 0))
    assert stays(utility) == [("NEW", "S", "2025-07-10", ""), ("OLD", "S", "", "2025-07-10")]
    assert fates(utility.take("units", PLACED + rows)) == (0, 2, 0, 0)


@pytest.mark.parametrize("order", [(0, 1, 2), (2, 1, 0), (1, 0, 2), (1, 2, 0)])
def test_a_chain_of_exchanges_is_taken_in_any_order(utility, fates, order) -> None:
    """A register may bring years of exchanges of a site whose first unit is held already."""
    utility.take("units", PLACED + "A,25,S,,\n")
    rows = ["A,25,S,,2015-01-01\n", "B,25,S,2015-01-01,2020-01-01\n", "C,25,S,2020-01-01,\n"]
    report = utility.take("units", PLACED + "".join(rows[place] for place in order))
    assert fates(report) == (2, 0, 1, 0)
    assert [row[0] for row in stays(utility)] == ["A", "B", "C"]


def test_a_moved_unit_has_two_stays(utility, fates) -> None:
    """The unit's life goes with it to the next place."""
    utility.take("units", PLACED + "T,25,S-1,2020-01-01,\n")
    report = utility.take(
        "units", PLACED + "T,25,S-1,2020-01-01,2025-07-10\nT,25,S-2,2025-07-10,\n"
    )
    assert fates(report) == (1, 0, 1, 0)
    assert stays(utility) == [
        ("T", "S-1", "2020-01-01", "2025-07-10"),
        ("T", "S-2", "2025-07-10", ""),
    ]


def test_a_unit_cannot_stand_in_two_places(utility, fates) -> None:
    """Its load would count twice."""
    report = utility.take("units", PLACED + "T,25,S-1,2020-01-01,\nT,25,S-2,2021-01-01,\n")
    assert fates(report) == (1, 0, 0, 1)
    assert report.refusals[0].code == "unit_id.two_places"
    assert "S-1" in report.refusals[0].reason


@pytest.mark.parametrize("held_before", [True, False])
def test_an_occupied_site_is_refused(utility, fates, held_before) -> None:
    """Two units at one site would each be given all of its load."""
    rows = ["FIRST,25,S,,\n", "SECOND,25,S,,\n"]
    if held_before:
        utility.take("units", PLACED + rows.pop(0))
    report = utility.take("units", PLACED + "".join(rows))
    assert fates(report) == ((0 if held_before else 1), 0, 0, 1)
    (refusal,) = report.refusals
    assert (refusal.code, refusal.column) == ("site_id.occupied", "site_id")
    assert "FIRST" in refusal.reason
    assert utility.count(Unit) == 1


@pytest.mark.parametrize("removed", ["2020-01-01", "2019-12-31"])
def test_a_stay_that_ends_before_it_begins_is_refused(utility, fates, removed) -> None:
    """Mixed-up dates are common; a stay of no length is none."""
    report = utility.take("units", PLACED + f"T,25,S,2020-01-01,{removed}\n")
    assert fates(report) == (0, 0, 0, 1)
    assert report.refusals[0].code == "removed_on.too_early"


def test_dates_begin_at_local_midnight(utility) -> None:
    """A unit hung on the 1st carried no load the evening before."""
    utility.take("units", PLACED + "T,25,S,2025-07-01,\n", timezone="America/Chicago")
    assert held(utility)["installed_on"] == dt.datetime(2025, 7, 1, 5, tzinfo=dt.UTC)


def test_exchange_of_measured_units_moves_their_load(utility, hourly_csv) -> None:
    """Load read at the transformer is the site's; a new date of exchange must re-derive it."""
    utility.take("units", PLACED + "OLD,25,S,,\n")
    utility.take("loads", hourly_csv("OLD", [10.0] * 48))
    utility.take("units", PLACED + "NEW,25,S,2025-07-02,\nOLD,25,S,,2025-07-02\n")
    load = utility.site_load("S")
    assert list(load) == [10.0] * 24
    utility.take("loads", hourly_csv("NEW", [7.0] * 48))
    load = utility.site_load("S")
    assert list(load) == [10.0] * 24 + [7.0] * 24
    assert utility.problems() == []


def test_frames_are_taken_like_files(utility, fates) -> None:
    """Contract, section 5: the same verbs, with frames in."""
    frame = pd.DataFrame(
        {
            "Unit ID": ["T-1", "T-2"],
            "rated_kva": [25.0, -1.0],
            "customers": [3, None],
            "feeder": [None, "F"],
            "installed_on": pd.to_datetime(["2020-01-01", None]),
        }
    )
    report = utility.take("units", frame)
    assert fates(report) == (1, 0, 0, 1)
    assert (report.refusals[0].line, report.refusals[0].column) == (3, "rated_kva")
    assert held(utility)["customers"] == 3
    assert held(utility)["installed_on"] == dt.datetime(2020, 1, 1, tzinfo=dt.UTC)


def test_a_register_without_places_leaves_units_where_they_stand(utility, fates) -> None:
    """A new test sheet of rated figures must not move a unit, nor make up a site for it."""
    full = "unit_id,rated_kva,site_id,installed_on\nT-1,25,S-1,2020-01-01\n"
    utility.take("units", utility.file(full))
    report = utility.take("units", utility.file("unit_id,rated_kva\nT-1,37.5\nT-2,10\n", "b.csv"))
    assert fates(report) == (1, 0, 1, 0)
    assert held(utility)["rated_kva"] == 37.5
    assert held(utility)["site_id"] == "S-1"
    assert held(utility)["installed_on"] == dt.datetime(2020, 1, 1, tzinfo=dt.UTC)
    assert utility.count(Site) == 2


def test_a_register_without_dates_leaves_the_dates(utility, fates) -> None:
    """Where the file has no column for it, nothing is said of it."""
    utility.take(
        "units", utility.file("unit_id,rated_kva,site_id,installed_on\nT-1,25,S-1,2020-01-01\n")
    )
    again = utility.file("unit_id,rated_kva,site_id\nT-1,25,S-1\n", "b.csv")
    assert fates(utility.take("units", again)) == (0, 1, 0, 0)
    assert held(utility)["installed_on"] == dt.datetime(2020, 1, 1, tzinfo=dt.UTC)
