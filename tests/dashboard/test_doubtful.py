"""The page of connections in doubt without a browser."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from tracker.dashboard.app import create_app
from tracker.dashboard.pages import doubtful
from tracker.planning.doubtful import NO_VERDICT, doubtful_connections, doubts_table
from tracker.reports.tables import csv_text
from tracker.store.engine import Database

MOVE = {
    "rank": 1,
    "doubt": "meter may hang elsewhere",
    "unit_id": "U-A",
    "site_id": "S-A",
    "feeder": "LK-11 Saltmarsh",
    "rated_kva": 25.0,
    "customers": 4,
    "meters": 4,
    "peak_load_pct": 157.8,
    "meter_id": "M-7",
    "other_unit_id": "U-B & Co",
    "other_site_id": "S-B",
    "peak_load_if_moved_pct": 97.4,
    "other_peak_load_pct": 16.0,
    "other_peak_load_if_moved_pct": 68.2,
    "evidence": "M-7 peaks at 25 kVA",
}
COUNT = dict.fromkeys(MOVE) | {
    "rank": 2,
    "doubt": "meters per kVA far from the feeder's",
    "unit_id": "U-C",
    "site_id": "S-C",
    "rated_kva": 37.5,
    "meters": 1,
    "evidence": "1 meter on 37.5 kVA",
}


def test_a_move_shows_both_units_before_and_after() -> None:
    """The figures that make the hint, each beside its unit, and a way to both pages."""
    text = str(doubtful.doubt_list([MOVE]))
    for words in ("158", "97", "16", "68", "M-7", "S-A", "S-B", "unit?unit_id=U-A"):
        assert words in text
    assert "unit?unit_id=U-B+%26+Co" in text
    assert "M-7 peaks at 25 kVA." in text


def test_what_is_not_known_of_a_doubt_is_left_out() -> None:
    """No "None" on the page, and no empty table of a move that is none."""
    text = str(doubtful.doubt_list([COUNT]))
    assert "None · " not in text
    assert "As written down" not in text
    assert "37.5 kVA · 1 meter" in text
    assert "customer" not in text


def test_a_feeder_is_chosen_and_the_rest_is_told(fleet: Database) -> None:
    """The page shows a part; it says so, and the file has all."""
    assert doubtful.chosen([MOVE, COUNT], "LK-11 Saltmarsh") == [MOVE]
    assert doubtful.chosen([MOVE, COUNT], None) == [MOVE, COUNT]
    many = [MOVE] * (doubtful.MOST_SHOWN + 1)
    assert len(doubtful.doubt_list(many).children) == doubtful.MOST_SHOWN


def test_the_layout_says_that_hints_are_no_verdicts() -> None:
    """Whoever opens the page reads it before the first hint; the address names the feeder."""
    assert NO_VERDICT in str(doubtful.layout())
    assert "value='LK-12 Tannery'" in str(doubtful.layout(feeder="LK-12 Tannery"))
    assert "LK-1" not in str(doubtful.layout(feeder=["LK-1", "LK-2"]))


def test_doubts_are_sought_once_for_all_who_look(
    fleet: Database, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Comparing a fleet takes seconds: only a file that came in makes it worth while again."""
    sought = []

    def seek(database: Database) -> list[dict[str, Any]]:
        sought.append(database)
        return [MOVE]

    newest = [7]
    monkeypatch.setattr(doubtful, "doubtful_connections", seek)
    monkeypatch.setattr(doubtful, "newest_file", lambda _connection: newest[0])
    doubts = doubtful.Doubts(fleet)
    assert doubts.rows() == doubts.rows() == [MOVE]
    assert len(sought) == 1
    newest[0] = 8
    doubts.rows()
    assert len(sought) == 2


def over_the_wire(client: Any, feeder: str | None) -> Any:
    outputs = [
        {"id": f"doubtful-{name}", "property": prop}
        for name, prop in (("list", "children"), ("shown", "children"), ("feeder", "data"))
    ]
    reply = client.post(
        "/_dash-update-component",
        json={
            "output": f"..{'...'.join(o['id'] + '.' + o['property'] for o in outputs)}..",
            "outputs": outputs,
            "inputs": [{"id": "doubtful-feeder", "property": "value", "value": feeder}],
            "state": [{"id": "doubtful-feeder", "property": "data", "value": []}],
            "changedPropIds": [],
        },
    )
    assert reply.status_code == 200
    return reply.json["response"]


def test_the_page_and_the_file_over_the_wire(fleet: Database) -> None:
    """What a browser posts; the file is that of the command."""
    client = create_app(fleet).server.test_client()
    answer = over_the_wire(client, None)
    rows = doubtful_connections(fleet)
    assert answer["doubtful-shown"]["children"] == doubtful.shown_words(len(rows), len(rows))
    reply = client.get("/export/doubtful_connections.csv")
    assert reply.data == csv_text(doubts_table(rows)).encode()
    assert 'filename="doubtful_connections.csv"' in reply.headers["Content-Disposition"]


def test_an_empty_store_says_what_to_do(empty: Database) -> None:
    """Never a traceback, and no empty file."""
    client = create_app(empty).server.test_client()
    assert "Import units, connections and loads first" in str(over_the_wire(client, None))
    assert client.get("/export/doubtful_connections.csv").status_code == 409


def test_the_ranking_leads_here() -> None:
    """Nobody finds a page that nothing leads to."""
    from tracker.dashboard.pages import ranking

    assert "href='doubtful'" in str(ranking.layout())
    assert Path(doubtful.__file__).stem == doubtful.PAGE
