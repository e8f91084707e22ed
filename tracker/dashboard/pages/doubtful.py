"""Page "Connections in doubt": units whose figures suggest a wrong meter-to-unit connection."""

from __future__ import annotations

import threading
from collections.abc import Mapping, Sequence
from typing import Any

import dash_mantine_components as dmc
from dash import ClientsideFunction, Dash, Input, Output, State, html, register_page
from dash.development.base_component import Component

from tracker.dashboard import parts
from tracker.dashboard.words import counted, decimals, plain
from tracker.errors import TrackerError
from tracker.planning.doubtful import NO_VERDICT, doubtful_connections
from tracker.store.doubtful import newest_file
from tracker.store.engine import Database

PAGE = "doubtful"
FEEDER, LIST, SHOWN = f"{PAGE}-feeder", f"{PAGE}-list", f"{PAGE}-shown"

#: Doubts on the page; the file has all.
MOST_SHOWN = 100

Row = Mapping[str, Any]


# --- Pure functions -------------------------------------------------------------------------------


class Doubts:
    """All doubts of a store, found anew when a file has come in."""

    def __init__(self, database: Database) -> None:
        self._database = database
        self._lock = threading.Lock()
        self._found: tuple[int | None, Sequence[Row]] | None = None

    def rows(self) -> Sequence[Row]:
        """Return the doubts, the most telling first.

        Raises
        ------
        InputError
            If the store holds no load.
        """
        with self._lock:  # whoever comes while they are sought waits for the same answer
            with self._database.reading() as connection:
                newest = newest_file(connection)
            if self._found is None or self._found[0] != newest:
                self._found = newest, doubtful_connections(self._database)
            return self._found[1]


def chosen(rows: Sequence[Row], feeder: str | None) -> list[Row]:
    """Return the doubts of a feeder, or all."""
    return [row for row in rows if not feeder or row["feeder"] == feeder]


def shown_words(shown: int, total: int) -> str:
    """Say how many doubts there are, and where the rest is.

    >>> shown_words(3, 3), shown_words(100, 250)
    ('3 doubts', '100 of 250 doubts; the file has all')
    """
    if shown == total:
        return counted(total, "doubt", "doubts")
    return f"{shown:,} of {total:,} doubts; the file has all"


# --- Layout ---------------------------------------------------------------------------------------


def layout(feeder: Any = None, **_others: Any) -> html.Main:
    """Return the page without data: Dash calls every layout once, without arguments."""
    feeder = feeder if isinstance(feeder, str) else None
    return html.Main(
        [
            html.Nav(html.A("← Ranking", href="."), className="back", **parts.aria(label="Back")),
            html.Div(
                [
                    html.H1("Connections in doubt"),
                    html.P(
                        "Units whose figures suggest that a meter is written down at the wrong "
                        "transformer.",
                        className="lead",
                    ),
                ],
                className="page-head",
            ),
            parts.notice(NO_VERDICT),
            html.Div(
                [
                    dmc.Select(
                        id=FEEDER,
                        label="Feeder",
                        placeholder="All feeders",
                        data=[feeder] if feeder else [],
                        value=feeder,
                        searchable=True,
                        clearable=True,
                        nothingFoundMessage="No doubts there",
                        className="control",
                    ),
                    html.Div(
                        html.Span(id=SHOWN, className="shown", **parts.aria(live="polite")),
                        className="state",
                    ),
                    html.A(
                        "Export doubts (.csv)",
                        href="export/doubtful_connections.csv",
                        download="doubtful_connections.csv",
                        title="The same file as `tracker doubtful FILE.csv` writes",
                        className="button",
                    ),
                ],
                className="controls",
            ),
            html.Div(html.P("Comparing sites with their neighbours …"), id=LIST),
        ],
        id=f"{PAGE}-page",
    )


def doubt_list(rows: Sequence[Row]) -> Component:
    """Return doubts one below the other."""
    if not rows:
        return html.P("Nothing in the figures suggests a wrong connection.")
    return html.Ol([html.Li(_doubt(row)) for row in rows[:MOST_SHOWN]], className="doubts")


def _doubt(row: Row) -> html.Section:
    where = [
        row["feeder"],
        f"site {row['site_id']}",
        f"{plain(row['rated_kva'])} kVA",
        counted(row["meters"], "meter", "meters"),
    ]
    if row["customers"] is not None:
        where.append(counted(row["customers"], "customer", "customers"))
    return html.Section(
        [
            html.H2(
                [
                    html.A(row["unit_id"], href=parts.unit_address(row["unit_id"])),
                    html.Span(row["doubt"], className="doubt-kind"),
                ]
            ),
            html.P(" · ".join(each for each in where if each), className="doubt-where"),
            _move(row) if row["meter_id"] is not None else None,
            html.P(f"{row['evidence'][:1].upper()}{row['evidence'][1:]}.", className="evidence"),
        ],
        className="panel doubt",
    )


def _move(row: Row) -> html.Div:
    """Show what moving a meter would make of both units."""
    peaks = (
        (row["unit_id"], row["peak_load_pct"], row["peak_load_if_moved_pct"]),
        (row["other_unit_id"], row["other_peak_load_pct"], row["other_peak_load_if_moved_pct"]),
    )
    headings = ("Peak load, % of rating", "As written down", "If moved")
    return html.Div(
        [
            html.P(
                [
                    html.Strong(row["meter_id"]),
                    f" is written down at {row['site_id']} and may hang at {row['other_site_id']} (",
                    html.A(row["other_unit_id"], href=parts.unit_address(row["other_unit_id"])),
                    ").",
                ]
            ),
            html.Table(
                [
                    html.Thead(html.Tr([html.Th(each, scope="col") for each in headings])),
                    html.Tbody(
                        [
                            html.Tr(
                                [
                                    html.Th(unit_id, scope="row"),
                                    html.Td(decimals(before_pct, 0)),
                                    html.Td(decimals(after_pct, 0)),
                                ]
                            )
                            for unit_id, before_pct, after_pct in peaks
                        ]
                    ),
                ],
                className="plate",
            ),
        ]
    )


# --- Callbacks ------------------------------------------------------------------------------------


def register(app: Dash, database: Database) -> None:
    """Attach the page and its callbacks to `app`."""
    register_page(
        PAGE,
        path="/doubtful",
        name="Connections in doubt",
        title="Connections in doubt - tracker",
        layout=layout,
    )
    doubts = Doubts(database)

    @app.callback(
        Output(LIST, "children"),
        Output(SHOWN, "children"),
        Output(FEEDER, "data"),
        Input(FEEDER, "value"),
        State(FEEDER, "data"),
    )
    def _list(feeder: str | None, offered: list[str]) -> tuple[Any, ...]:
        try:
            rows = doubts.rows()
        except TrackerError as error:
            return parts.notice(str(error)), "", offered
        wanted = chosen(rows, feeder)
        feeders = {row["feeder"] for row in rows if row["feeder"]} | ({feeder} if feeder else set())
        words = shown_words(min(len(wanted), MOST_SHOWN), len(wanted))
        return doubt_list(wanted), words, sorted(feeders)

    app.clientside_callback(
        ClientsideFunction("tracker", "keepFeeder"),
        Output(FEEDER, "id"),
        Input(FEEDER, "value"),
        prevent_initial_call=True,
    )
