"""The ranking page without a browser."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any
from urllib.parse import parse_qs

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sqlalchemy import event, insert

from tracker.dashboard.app import create_app
from tracker.dashboard.pages import ranking, unit
from tracker.dashboard.view import (
    HEADINGS,
    View,
    grid_filters,
    query_from_view,
    view_from_grid,
    view_from_query,
)
from tracker.errors import InputError
from tracker.planning.priority import priority_list
from tracker.reports.tables import csv_text
from tracker.store.engine import Database
from tracker.store.models import Assessment, IntakeFile, Unit
from tracker.store.results import RANKING_COLUMNS, TEXT_COLUMNS, Filter
from tracker.store.schema import open_database

from .conftest import FEEDERS, GAPPY, HOTTEST, N_UNIT, NO_DATA, NOWHERE


def block(start: int = 0, stop: int = 100, **extra: Any) -> dict[str, Any]:
    """Return a block request as the grid posts it."""
    return {"startRow": start, "endRow": stop, "sortModel": [], "filterModel": {}, **extra}


@contextmanager
def statements(database: Database) -> Iterator[list[str]]:
    """Collect the SQL statements that go to the database, transactions aside."""
    seen: list[str] = []

    def note(_c: Any, _cursor: Any, statement: str, *_rest: Any) -> None:
        if not statement.startswith(("BEGIN", "COMMIT", "ROLLBACK")):
            seen.append(statement)

    event.listen(database.engine, "before_cursor_execute", note)
    yield seen
    event.remove(database.engine, "before_cursor_execute", note)


# --- Rows -----------------------------------------------------------------------------------------


def test_hottest_first_unless_asked_otherwise(fleet: Database) -> None:
    """What the engineer comes for stands on top without a press."""
    answer = ranking.rows_for(fleet, block(0, 3))
    rows = answer["rowData"]
    assert answer["rowCount"] == N_UNIT
    assert rows[0]["unit_id"] == HOTTEST
    peaks = [float(row["peak_hot_spot_c"]) for row in rows]
    assert peaks == sorted(peaks, reverse=True)


@pytest.mark.parametrize("way", ["asc", "desc"])
@pytest.mark.parametrize("column", list(HEADINGS))
def test_order_is_global_and_units_apart_or_without_figures_come_last(
    fleet: Database, column: str, way: str
) -> None:
    """Every column sorts in the database over all rows, not within a block."""
    ask = {"sortModel": [{"colId": column, "sort": way}]}
    pieces = [ranking.rows_for(fleet, block(s, s + 80, **ask))["rowData"] for s in (0, 80, 160)]
    rows = [row for piece in pieces for row in piece]
    assert len({row["unit_id"] for row in rows}) == N_UNIT
    standings = [_standing_of(row) for row in rows]
    assert standings == sorted(standings)
    for standing in set(standings):
        values = [row[column] for row in rows if _standing_of(row) == standing]
        known = [value for value in values if value != "–"]
        assert values[: len(known)] == known
        text = column in TEXT_COLUMNS or column == "peak_hot_spot_at"
        keys = known if text else [float(value.replace(",", "")) for value in known]
        assert keys == sorted(keys, reverse=way == "desc")  # type: ignore[type-var]


def _standing_of(row: dict[str, Any]) -> int:
    """Return 0 for a ranked unit, 1 for one that stands apart, 2 for one without figures."""
    if row["peak_hot_spot_c"] == "–":
        return 2
    return int(row["apart"])


def test_a_unit_short_of_data_stands_apart_with_word_and_reason(fleet: Database) -> None:
    """It is told by words in its row, not by a colour, and the ranked keep their places."""
    rows = ranking.rows_for(fleet, block(N_UNIT - 4, N_UNIT))["rowData"]
    assert [row["place"] for row in rows] == [str(N_UNIT - 3), "apart", "239", "240"]
    apart = rows[1]
    assert apart["unit_id"] == GAPPY
    assert (
        apart["heat_words"]
        == f"only {int(float(apart['coverage_pct']))} % of its energy is measured"
    )
    page = unit.unit_page(fleet, GAPPY)
    assert unit.place_words(page) == "ranked apart"
    assert unit.place_words(unit.unit_page(fleet, HOTTEST)) == f"1 of {N_UNIT}"


def test_units_without_data_say_why(fleet: Database) -> None:
    """A blank would leave open whether the unit is cool or unknown."""
    rows = ranking.rows_for(fleet, block(N_UNIT - 2, N_UNIT))["rowData"]
    said = {row["unit_id"]: row["heat_words"] for row in rows}
    assert said == {NO_DATA: "no load or air data", NOWHERE: "at no site"}
    assert all("nan" not in str(value).lower() for row in rows for value in row.values())


def test_a_55_degree_unit_is_warm_above_95(fleet: Database) -> None:
    """Normal aging lies lower for the older winding rise; the words follow the unit."""
    words = {
        rise: ranking.heat_of(100.0, ranking.reference_hot_spot_c(rise), 140.0).words
        for rise in (None, 65.0, 55.0)
    }
    assert words == {None: "within limits", 65.0: "within limits", 55.0: "warm: over 95 °C"}


def test_filters_work_in_the_database(fleet: Database) -> None:
    """A filter cuts the count, not only the block that is on the screen."""
    model = grid_filters(
        [Filter("feeder", "equals", FEEDERS[0]), Filter("rated_kva", "from", 50.0)]
    )
    answer = ranking.rows_for(fleet, block(0, 2, filterModel=model))
    assert len(answer["rowData"]) == 2
    assert 2 < answer["rowCount"] < N_UNIT / 3
    assert {row["feeder"] for row in answer["rowData"]} == {FEEDERS[0]}


def test_a_block_and_the_overview_take_few_statements(fleet: Database) -> None:
    """The promise of speed that a test can hold: statements, not seconds."""
    with statements(fleet) as of_block:
        ranking.rows_for(fleet, block())
    with statements(fleet) as of_overview:
        ranking.overview(fleet)
    assert len(of_block) <= 3
    assert len(of_overview) <= 4


@pytest.mark.parametrize(
    ("request_", "said"),
    [
        (
            block(sortModel=[{"colId": "id; DROP TABLE unit", "sort": "asc"}]),
            "is not in the ranking",
        ),
        (block(sortModel=[{"colId": "unit_id", "sort": "up"}]), "sort direction 'up'"),
        (block(filterModel={"password": {"type": "equals"}}), "is not in the ranking"),
        (block(filterModel={"rated_kva": {"type": "contains", "filter": "5"}}), "does not fit"),
        (block(filterModel={"rated_kva": {"type": "equals", "filter": "nan"}}), "not a number"),
        (block(filterModel={"peak_hot_spot_at": {"type": "greaterThan"}}), "not a date"),
        (block(0, 5_000), "no block"),
        (block(-1, 5), "no block"),
        ({"startRow": "x"}, "no block of rows"),
        (block(filterModel=[1]), None),
        (block(filterModel={"unit_id": 7}), "does not fit"),
    ],
)
def test_odd_requests_are_refused_in_plain_words(
    fleet: Database, request_: dict[str, Any], said: str | None
) -> None:
    """What arrives over the wire is checked before it comes near a query."""
    if said is None:
        assert ranking.rows_for(fleet, request_)["rowCount"] == N_UNIT
    else:
        with pytest.raises(InputError, match=said):
            ranking.rows_for(fleet, request_)


# --- Overview -------------------------------------------------------------------------------------


def test_cards_count_what_their_filters_show(fleet: Database) -> None:
    """The number on a card is the number of rows it shows when pressed."""
    counts = ranking.overview(fleet).counts
    for name, card in ranking.CARDS.items():
        answer = ranking.rows_for(fleet, block(filterModel=grid_filters(card.filters)))
        assert counts[name] == answer["rowCount"], name
    assert counts["all"] == N_UNIT
    assert counts["over-limit"] > 0
    assert counts["short-of-data"] >= 3


def test_files_that_came_in_later_are_counted(tmp_path: Any) -> None:
    """Figures that no longer fit the data must not look as if they did."""
    database = open_database(f"sqlite:///{tmp_path / 'later.db'}")
    made_at = dt.datetime(2026, 9, 1, 6, tzinfo=dt.UTC)
    with database.writing() as connection:
        connection.execute(
            insert(Assessment).values(
                made_at=made_at,
                finished_at=made_at,
                program_version="0",
                settings={},
                starts_at=made_at,
                ends_at=made_at,
                data_fingerprint="",
            )
        )
        for hours, taken in ((-1, 5), (1, 5), (2, 0)):
            connection.execute(
                insert(IntakeFile).values(
                    kind="loads",
                    name="loads.csv",
                    fingerprint="",
                    imported_at=made_at + dt.timedelta(hours=hours),
                    options={},
                    readings=5,
                    taken=taken,
                    unchanged=5 - taken,
                    corrected=0,
                    refused=0,
                )
            )
    assert ranking.overview(database).files_since == 1
    database.close()


def test_an_empty_store_and_one_never_assessed_say_what_to_do(empty: Database) -> None:
    """The first page a new user sees names the commands to run."""
    client = create_app(empty).server.test_client()
    assert "tracker import units units.csv" in str(_overview_over_the_wire(client))
    assert ranking.rows_for(empty, block()) == {"rowData": [], "rowCount": 0}
    with empty.writing() as connection:
        connection.execute(insert(Unit).values(unit_id="A", rated_kva=25.0))
    said = str(_overview_over_the_wire(client))
    assert "No assessment yet" in said
    assert "tracker assess" in said


# --- Views in the address -------------------------------------------------------------------------

NUMBER_COLUMNS = sorted(set(HEADINGS) - TEXT_COLUMNS - {"peak_hot_spot_at"})
number_filters = st.builds(
    Filter,
    st.sampled_from(NUMBER_COLUMNS),
    st.sampled_from(["above", "below", "from", "to", "equals"]),
    st.floats(-1e6, 1e6).map(lambda value: float(f"{value:.9g}")),
)
text_filters = st.builds(
    Filter,
    st.sampled_from(sorted(TEXT_COLUMNS)),
    st.sampled_from(["contains", "equals"]),
    st.text(st.characters(exclude_categories=["Cs"]), min_size=1, max_size=20),
)
views = st.builds(
    View,
    st.lists(number_filters | text_filters, max_size=4, unique_by=lambda each: each.column).map(
        tuple
    ),
    st.lists(
        st.tuples(st.sampled_from(sorted(HEADINGS)), st.sampled_from(["asc", "desc"])),
        min_size=1,
        max_size=3,
        unique_by=lambda each: each[0],
    ).map(tuple),
)


@given(views)
def test_a_view_survives_the_address_and_the_grid(view: View) -> None:
    """A link that is sent shows the same; what the grid holds is what was asked."""
    read, problems = view_from_query(parse_qs(query_from_view(view), keep_blank_values=True))
    assert problems == []
    assert (set(read.filters), read.sort) == (set(view.filters), view.sort)
    sort_model = [{"colId": name, "sort": way} for name, way in view.sort]
    asked = view_from_grid({"filterModel": grid_filters(view.filters), "sortModel": sort_model})
    assert asked == view


def test_a_range_becomes_two_conditions() -> None:
    """The grid's "between" has both its ends."""
    view, _ = view_from_query({"peak_hot_spot_c": ["from:110", "to:140"]})
    assert view_from_grid({"filterModel": grid_filters(view.filters)}).filters == view.filters


@pytest.mark.parametrize(
    ("query", "said"),
    [
        ({"colour": "red"}, "no column"),
        ({"sort": "-colour"}, "no column"),
        ({"aging_factor": "above:much"}, "not a number"),
        ({"aging_factor": "contains:1"}, "does not fit"),
        ({"peak_hot_spot_at": "above:yesterday"}, "not a date"),
    ],
)
def test_an_address_that_is_not_understood_says_so(query: dict[str, str], said: str) -> None:
    """A mistyped link still opens, and nobody takes it for what it is not."""
    view, problems = view_from_query(query)
    assert view == View()
    assert said in problems[0]
    assert said in str(ranking.layout(**query))


def test_every_heading_is_a_column_of_the_store() -> None:
    """Nothing can be sorted that the store does not know."""
    assert set(HEADINGS) <= set(RANKING_COLUMNS)
    assert set(HEADINGS) == set(ranking.WIDTHS)


# --- Over the wire --------------------------------------------------------------------------------


def _overview_over_the_wire(client: Any) -> Any:
    outputs = [
        {"id": "ranking-strip", "property": "children"},
        {"id": "ranking-news", "property": "children"},
        {"id": "ranking-body", "property": "hidden"},
        {"id": "ranking-feeder", "property": "data"},
        *({"id": f"ranking-count-{name}", "property": "children"} for name in ranking.CARDS),
    ]
    reply = client.post(
        "/_dash-update-component",
        json={
            "output": f"..{'...'.join(o['id'] + '.' + o['property'] for o in outputs)}..",
            "outputs": outputs,
            "inputs": [{"id": "ranking-page", "property": "id", "value": "ranking-page"}],
            "state": [{"id": "ranking-feeder", "property": "value", "value": None}],
            "changedPropIds": [],
        },
    )
    assert reply.status_code == 200
    return reply.json


def _rows_over_the_wire(client: Any, request: dict[str, Any]) -> Any:
    return client.post(
        "/_dash-update-component",
        json={
            "output": "..ranking-grid.getRowsResponse...ranking-shown.children..",
            "outputs": [
                {"id": "ranking-grid", "property": "getRowsResponse"},
                {"id": "ranking-shown", "property": "children"},
            ],
            "inputs": [{"id": "ranking-grid", "property": "getRowsRequest", "value": request}],
            "changedPropIds": ["ranking-grid.getRowsRequest"],
        },
    )


def test_rows_and_headers_over_the_wire(fleet: Database) -> None:
    """The JSON a browser posts, and the headers every answer carries."""
    reply = _rows_over_the_wire(create_app(fleet).server.test_client(), block(0, 2))
    assert reply.status_code == 200
    answer = reply.json["response"]
    assert answer["ranking-grid"]["getRowsResponse"]["rowCount"] == N_UNIT
    assert answer["ranking-shown"]["children"] == f"{N_UNIT} units shown"
    assert "script-src 'self' 'sha256-" in reply.headers["Content-Security-Policy"]
    assert "unsafe-eval" not in reply.headers["Content-Security-Policy"]
    assert reply.headers["X-Content-Type-Options"] == "nosniff"
    assert reply.headers["Referrer-Policy"] == "same-origin"


def test_an_odd_request_over_the_wire_is_answered_with_a_message(fleet: Database) -> None:
    """Never a traceback: no rows, and a sentence that says why."""
    request = block(sortModel=[{"colId": "colour", "sort": "asc"}])
    reply = _rows_over_the_wire(create_app(fleet).server.test_client(), request)
    assert reply.status_code == 200
    assert "is not in the ranking" in str(reply.json["sideUpdate"])


def test_export_is_the_file_of_the_command(fleet: Database) -> None:
    """One list, whichever door it leaves by."""
    reply = create_app(fleet).server.test_client().get("/export/priority_list.csv")
    assert reply.data == csv_text(priority_list(fleet)).encode()
    assert 'filename="priority_list.csv"' in reply.headers["Content-Disposition"]


def test_export_without_an_assessment_says_so(empty: Database) -> None:
    """An export that cannot be made is no empty file."""
    reply = create_app(empty).server.test_client().get("/export/priority_list.csv")
    assert reply.status_code == 409
    assert "tracker assess" in reply.text
