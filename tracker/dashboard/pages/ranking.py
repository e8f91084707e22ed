"""Page "Ranking": every unit, sorted and filtered in the database, hottest first."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import dash_ag_grid as dag
import dash_mantine_components as dmc
from dash import (
    ClientsideFunction,
    Dash,
    Input,
    Output,
    State,
    ctx,
    dcc,
    html,
    no_update,
    register_page,
    set_props,
)
from dash.development.base_component import Component

from tracker.dashboard import parts
from tracker.dashboard.view import (
    HEADINGS,
    NUMBER_OPTIONS,
    TEXT_OPTIONS,
    TIME_COLUMNS,
    TIME_OPTIONS,
    View,
    filter_in_words,
    grid_filters,
    query_from_view,
    view_from_grid,
    view_from_query,
)
from tracker.dashboard.words import (
    HEAT_STEPS_C,
    NONE,
    counted,
    decimals,
    heat_of,
    moment,
    plain,
    reference_hot_spot_c,
    significant,
)
from tracker.errors import InputError, TrackerError
from tracker.planning.standing import why_apart
from tracker.settings import LEAST_COVERAGE_PCT, AssessmentSettings
from tracker.store.engine import Database
from tracker.store.results import (
    TEXT_COLUMNS,
    AssessmentRow,
    Filter,
    count_units,
    feeders,
    files_since,
    has_units,
    latest_assessment,
    ranking_page,
)

PAGE = "ranking"
GRID, SEARCH, FEEDER, MESSAGE = (
    f"{PAGE}-grid",
    f"{PAGE}-search",
    f"{PAGE}-feeder",
    f"{PAGE}-message",
)
ADDRESS, BODY, STRIP, NEWS = f"{PAGE}-address", f"{PAGE}-body", f"{PAGE}-strip", f"{PAGE}-news"
CLEAR, CHOSEN, SHOWN = f"{PAGE}-clear", f"{PAGE}-chosen", f"{PAGE}-shown"

ROWS_A_BLOCK = 100
MOST_ROWS_A_BLOCK = 1_000


@dataclass(frozen=True, slots=True)
class Card:
    """A group of units that one press shows: its heading, and the filter that makes it."""

    heading: str
    filters: tuple[Filter, ...]


CARDS = {
    "all": Card("Units assessed", ()),
    "over-limit": Card(
        "Over the hot-spot limit", (Filter("hours_over_hot_spot_limit", "above", 0.0),)
    ),
    "fast-aging": Card("Aging faster than normal", (Filter("aging_factor", "above", 1.0),)),
    "over-rating": Card("Over rating", (Filter("hours_over_rating", "above", 0.0),)),
    "short-of-data": Card(
        f"Short of data: coverage below {LEAST_COVERAGE_PCT:g}\u00a0%",
        (Filter("coverage_pct", "below", LEAST_COVERAGE_PCT),),
    ),
}
CARD_COLUMNS = frozenset(each.column for card in CARDS.values() for each in card.filters)

WIDTHS = {
    "unit_id": 120,
    "peak_hot_spot_c": 214,
    "peak_hot_spot_at": 152,
    "peak_load_pct": 100,
    "hours_over_rating": 94,
    "hours_over_hot_spot_limit": 108,
    "aging_factor": 102,
    "life_used_pct": 92,
    "feeder": 140,
    "rated_kva": 84,
    "coverage_pct": 108,
    "peak_top_oil_c": 106,
    "site_id": 120,
}


# --- Pure functions -------------------------------------------------------------------------------


def rows_for(database: Database, request: Mapping[str, Any]) -> dict[str, Any]:
    """Answer one block request of the grid.

    Raises
    ------
    InputError
        If it asks for rows, columns or filters that are none of ours.
    """
    view = view_from_grid(request)
    start, stop = _block_of(request)
    with database.reading() as connection:
        assessment = latest_assessment(connection)
        if assessment is None:
            return {"rowData": [], "rowCount": 0}
        page = ranking_page(
            connection,
            assessment.key,
            start=start,
            stop=stop,
            sort=view.sort,
            filters=view.filters,
        )
    limit_c = AssessmentSettings(**assessment.settings).hot_spot_limit_c
    rows = [shown_row(row, start + place, limit_c) for place, row in enumerate(page.rows, 1)]
    return {"rowData": rows, "rowCount": page.total}


def shown_row(row: Mapping[str, Any], place: int, limit_c: float) -> dict[str, Any]:
    """Write one row of the ranking as people read it; every cell is text."""
    peak_c, apart = row["peak_hot_spot_c"], why_apart(row)
    if peak_c is None:
        step, words = None, _reason(row)
    else:
        heat = heat_of(peak_c, reference_hot_spot_c(row["winding_rise_c"]), limit_c)
        step, words = heat.step, apart or heat.words
    known = peak_c is not None
    return {
        "place": "apart" if apart else f"{place:,}",
        "unit_id": row["unit_id"],
        "href": parts.unit_address(row["unit_id"]),
        "feeder": row["feeder"] or NONE,
        "site_id": row["site_id"] or NONE,
        "rated_kva": plain(row["rated_kva"]),
        "peak_hot_spot_c": decimals(peak_c, 1),
        "heat_step": step,
        "heat_words": words,
        "apart": apart is not None,
        "peak_hot_spot_at": moment(row["peak_hot_spot_at"]),
        "peak_top_oil_c": decimals(row["peak_top_oil_c"], 1),
        "peak_load_pct": decimals(row["peak_load_pct"], 0),
        "hours_over_rating": decimals(row["hours_over_rating"] if known else None, 1),
        "hours_over_hot_spot_limit": decimals(
            row["hours_over_hot_spot_limit"] if known else None, 1
        ),
        "aging_factor": significant(row["aging_factor"]),
        "life_used_pct": significant(row["life_used_pct"]),
        "coverage_pct": decimals(row["coverage_pct"], 1),
    }


@dataclass(frozen=True, slots=True)
class Overview:
    """What stands above the grid."""

    assessment: AssessmentRow | None
    holds_units: bool
    counts: Mapping[str, int]
    feeders: Sequence[str]
    files_since: int


def overview(database: Database) -> Overview:
    """Read what stands above the grid."""
    with database.reading() as connection:
        assessment = latest_assessment(connection)
        if assessment is None:
            return Overview(None, has_units(connection), {}, (), 0)
        groups = {name: card.filters for name, card in CARDS.items()}
        return Overview(
            assessment,
            True,
            count_units(connection, assessment.key, groups),
            feeders(connection),
            files_since(connection, assessment.made_at),
        )


def pressed_card(filters: Sequence[Filter]) -> str | None:
    """Return the card whose group these filters show; None for a choice of one's own."""
    of_cards = {each for each in filters if each.column in CARD_COLUMNS}
    for name, card in CARDS.items():
        if of_cards == set(card.filters):
            return name
    return None


def with_choice(view: View, changed: Mapping[str, Sequence[Filter]]) -> tuple[Filter, ...]:
    """Put filters in the place of those that a view has on the same columns."""
    kept = [each for each in view.filters if each.column not in changed]
    return (*kept, *(each for filters in changed.values() for each in filters))


def _reason(row: Mapping[str, Any]) -> str:
    """Say why a unit has no figure; its own page says more."""
    if row["site_id"] is None:
        return "at no site"
    return "no load or air data"


def _block_of(request: Mapping[str, Any]) -> tuple[int, int]:
    try:
        start, stop = int(request["startRow"]), int(request["endRow"])
    except (KeyError, TypeError, ValueError) as error:
        raise InputError("the grid asked for no block of rows. Load the page again.") from error
    if not 0 <= start <= stop <= start + MOST_ROWS_A_BLOCK:
        raise InputError(
            f"rows {start} to {stop} are no block; allowed up to {MOST_ROWS_A_BLOCK} rows from 0 on. "
            "Load the page again."
        )
    return start, stop


# --- Layout ---------------------------------------------------------------------------------------


def layout(**query: Any) -> html.Main:
    """Return the page without data: Dash calls every layout once, without arguments."""
    view, problems = view_from_query(query)
    return html.Main(
        [
            html.Div(
                [
                    html.H1("Ranking by hot spot"),
                    html.P(
                        "Every unit of the fleet, hottest first; those of whose energy too little "
                        "is measured stand apart, after the others. "
                        "Filters and order are kept in the address: send it as it stands.",
                        className="lead",
                    ),
                    html.P(
                        [
                            html.A("Connections in doubt", href="doubtful", id=f"{PAGE}-doubts"),
                            ": units whose figures suggest a wrong meter-to-unit connection.",
                        ],
                        className="see-also",
                    ),
                ],
                className="page-head",
            ),
            parts.first_caution(),
            html.Div(id=STRIP),
            html.Div(id=NEWS),
            html.Div([parts.notice(problem) for problem in problems], id=MESSAGE),
            html.Div(
                [_cards(view), _controls(view), _grid(view), _scale()], id=BODY, className="body"
            ),
            parts.cautions(),
            dcc.Store(id=ADDRESS),
        ],
        id=f"{PAGE}-page",
    )


def _cards(view: View) -> html.Div:
    pressed = pressed_card(view.filters)
    return html.Div(
        [
            html.Button(
                [
                    html.Span("…", id=f"{PAGE}-count-{name}", className="card-count"),
                    html.Span(card.heading, className="card-heading"),
                ],
                id=f"{PAGE}-card-{name}",
                className="card",
                type="button",
                **parts.aria(pressed=str(name == pressed).lower()),
            )
            for name, card in CARDS.items()
        ],
        className="cards",
        role="group",
        **parts.aria(label="Groups of units"),
    )


def _controls(view: View) -> html.Div:
    search, feeder = _controls_of(view)
    return html.Div(
        [
            dmc.TextInput(
                id=SEARCH,
                label="Unit id contains",
                value=search,
                debounce=300,
                className="control",
            ),
            dmc.Select(
                id=FEEDER,
                label="Feeder",
                placeholder="All feeders",
                data=[feeder] if feeder else [],
                value=feeder,
                searchable=True,
                clearable=True,
                nothingFoundMessage="No such feeder",
                className="control",
            ),
            html.Div(
                [
                    html.Span(id=SHOWN, className="shown", **parts.aria(live="polite")),
                    html.Span(id=CHOSEN, className="chosen"),
                    html.Button(
                        "Show all", id=CLEAR, type="button", className="quiet", hidden=True
                    ),
                ],
                className="state",
            ),
            html.A(
                "Export priority list (.csv)",
                href="export/priority_list.csv",
                download="priority_list.csv",
                title="The whole fleet in order of urgency, the same file as `tracker export` makes",
                id=f"{PAGE}-export",
                className="button",
            ),
        ],
        className="controls",
    )


def _grid(view: View) -> html.Div:
    grid = dag.AgGrid(
        id=GRID,
        rowModelType="infinite",
        columnDefs=_columns(),
        defaultColDef={
            "sortable": True,
            "resizable": True,
            "wrapHeaderText": True,
            "autoHeaderHeight": True,
            "suppressHeaderMenuButton": True,
        },
        getRowId="params.data.unit_id",
        dashGridOptions={
            "cacheBlockSize": ROWS_A_BLOCK,
            "maxBlocksInCache": 20,
            "rowHeight": 38,
            "suppressMovableColumns": True,
            "initialState": {
                "partialColumnState": True,
                "filter": {"filterModel": grid_filters(view.filters)},
                "sort": {"sortModel": [{"colId": name, "sort": way} for name, way in view.sort]},
            },
        },
        className="grid",
        style={"height": None},
    )
    return html.Div(grid, role="region", **parts.aria(label="Units"))


def _columns() -> list[dict[str, Any]]:
    place = {
        "field": "place",
        "headerName": "#",
        "headerTooltip": "Place in the order shown",
        "width": 60,
        "sortable": False,
        "pinned": "left",
        "type": "rightAligned",
    }
    return [place, *(_column(name, heading) for name, heading in HEADINGS.items())]


def _column(name: str, heading: str) -> dict[str, Any]:
    column: dict[str, Any] = {
        "field": name,
        "headerName": heading,
        "width": WIDTHS[name],
        "sortingOrder": ["asc", "desc"] if name in TEXT_COLUMNS else ["desc", "asc"],
        **_filter_of(name),
    }
    if name not in TEXT_COLUMNS | TIME_COLUMNS | {"peak_hot_spot_c"}:
        column["type"] = "rightAligned"
    if name == "aging_factor":
        column["headerTooltip"] = "F_EQA over the counted hours; 1 is normal aging"
    if name == "unit_id":
        column |= {"cellRenderer": "UnitLink", "pinned": "left"}
    if name == "peak_hot_spot_c":
        column["cellRenderer"] = "HotSpot"
    return column


def _filter_of(name: str) -> dict[str, Any]:
    kind: str
    options: Sequence[str]
    if name in TEXT_COLUMNS:
        kind, options = "agTextColumnFilter", TEXT_OPTIONS
    elif name in TIME_COLUMNS:
        kind, options = "agDateColumnFilter", TIME_OPTIONS
    else:
        kind, options = "agNumberColumnFilter", NUMBER_OPTIONS
    return {
        "filter": kind,
        "filterParams": {
            "filterOptions": list(options),
            "maxNumConditions": 1,
            "inRangeInclusive": True,
            "buttons": ["reset"],
        },
    }


def _scale() -> html.Div:
    """Explain the colours of the hot-spot column."""
    bounds = [f"{step:g}" for step in HEAT_STEPS_C]
    between = [f"{low} to {high}" for low, high in pairwise(bounds)]
    labels = [f"below {bounds[0]}", *between, f"{bounds[-1]} and above"]
    return html.Div(
        [
            html.Span("Peak hot spot, °C", className="scale-name"),
            *(html.Span(label, className=f"heat heat-{step}") for step, label in enumerate(labels)),
        ],
        className="scale",
    )


def _controls_of(view: View) -> tuple[str, str | None]:
    """Return what the search box and the feeder list show for a view."""
    search, feeder = "", None
    for each in view.filters:
        if each.column == "unit_id" and each.kind == "contains":
            search = str(each.value)
        if each.column == "feeder" and each.kind == "equals":
            feeder = str(each.value)
    return search, feeder


def _empty_store() -> Component:
    return html.Section(
        [
            html.H2("The store is empty"),
            html.P(
                "Bring in the register, the meters and the weather, then run the thermal model:"
            ),
            parts.commands(
                [
                    "tracker import units units.csv",
                    "tracker import connections connections.csv",
                    "tracker import loads loads.csv --timezone America/Chicago",
                    "tracker import weather weather.csv --timezone America/Chicago",
                    "tracker assess",
                ]
            ),
            html.P(["Or look around with an invented utility: ", html.Code("tracker demo")]),
        ],
        className="first-steps",
    )


def _not_assessed() -> Component:
    return html.Section(
        [
            html.H2("No assessment yet"),
            html.P("The store holds units, but the thermal model has not been run over them:"),
            parts.commands(["tracker assess"]),
        ],
        className="first-steps",
    )


# --- Callbacks ------------------------------------------------------------------------------------


def register(app: Dash, database: Database) -> None:
    """Attach the page and its callbacks to `app`."""
    register_page(PAGE, path="/", name="Ranking", title="Ranking - tracker", layout=layout)
    _register_overview(app, database)
    _register_rows(app, database)
    _register_controls(app)
    app.clientside_callback(
        ClientsideFunction("tracker", "keepAddress"),
        Output(ADDRESS, "modified_timestamp"),
        Input(ADDRESS, "data"),
        prevent_initial_call=True,
    )


def _register_overview(app: Dash, database: Database) -> None:
    @app.callback(
        Output(STRIP, "children"),
        Output(NEWS, "children"),
        Output(BODY, "hidden"),
        Output(FEEDER, "data"),
        *(Output(f"{PAGE}-count-{name}", "children") for name in CARDS),
        Input(f"{PAGE}-page", "id"),
        State(FEEDER, "value"),
    )
    def _overview(_page: str, feeder: str | None) -> tuple[Any, ...]:
        try:
            found = overview(database)
        except TrackerError as error:
            return (None, parts.notice(str(error)), True, [], *(NONE for _ in CARDS))
        if found.assessment is None:
            first_steps = _not_assessed() if found.holds_units else _empty_store()
            return (None, first_steps, True, [], *(NONE for _ in CARDS))
        offered = sorted({*found.feeders, *([feeder] if feeder else [])})
        return (
            parts.assessment_strip(database, found.assessment),
            parts.staleness(found.files_since),
            False,
            offered,
            *(f"{found.counts[name]:,}" for name in CARDS),
        )


def _register_rows(app: Dash, database: Database) -> None:
    @app.callback(
        Output(GRID, "getRowsResponse"),
        Output(SHOWN, "children"),
        Input(GRID, "getRowsRequest"),
        prevent_initial_call=True,
    )
    def _rows(request: dict[str, Any]) -> tuple[dict[str, Any], str]:
        try:
            answer = rows_for(database, request)
        except TrackerError as error:
            set_props(MESSAGE, {"children": parts.notice(str(error))})
            answer = {"rowData": [], "rowCount": 0}
        return answer, f"{counted(answer['rowCount'], 'unit', 'units')} shown"


def _register_controls(app: Dash) -> None:
    """Keep controls, grid and address in step: the grid's own filters are the truth."""

    @app.callback(
        Output(GRID, "filterModel"),
        Input(SEARCH, "value"),
        Input(FEEDER, "value"),
        Input(CLEAR, "n_clicks"),
        *(Input(f"{PAGE}-card-{name}", "n_clicks") for name in CARDS),
        State(GRID, "getRowsRequest"),
        prevent_initial_call=True,
    )
    def _choose(search: str | None, feeder: str | None, *rest: Any) -> Any:
        try:
            view = view_from_grid(rest[-1] or {})
        except InputError:
            view = View()
        changed = _change(str(ctx.triggered_id), search, feeder)
        filters = with_choice(view, changed)
        return no_update if set(filters) == set(view.filters) else grid_filters(filters)

    @app.callback(
        Output(ADDRESS, "data"),
        Output(CHOSEN, "children"),
        Output(CLEAR, "hidden"),
        Output(SEARCH, "value"),
        Output(FEEDER, "value"),
        *(Output(f"{PAGE}-card-{name}", "aria-pressed") for name in CARDS),
        Input(GRID, "getRowsRequest"),
        State(SEARCH, "value"),
        State(FEEDER, "value"),
        prevent_initial_call=True,
    )
    def _follow(request: dict[str, Any], search: str | None, feeder: str | None) -> tuple[Any, ...]:
        try:
            view = view_from_grid(request)
        except InputError:
            return (no_update,) * (5 + len(CARDS))
        shown_search, shown_feeder = _controls_of(view)
        pressed = pressed_card(view.filters)
        return (
            query_from_view(view),
            "; ".join(filter_in_words(each) for each in view.filters),
            not view.filters,
            no_update if shown_search == (search or "") else shown_search,
            no_update if shown_feeder == feeder else shown_feeder,
            *(str(name == pressed).lower() for name in CARDS),
        )


def _change(trigger: str, search: str | None, feeder: str | None) -> dict[str, Sequence[Filter]]:
    """Return the filters that a control asks for, by column; an empty list takes one away."""
    if trigger == SEARCH:
        return {"unit_id": [Filter("unit_id", "contains", search)] if search else []}
    if trigger == FEEDER:
        return {"feeder": [Filter("feeder", "equals", feeder)] if feeder else []}
    if trigger == CLEAR:
        return {column: [] for column in HEADINGS}
    changed: dict[str, Sequence[Filter]] = {column: [] for column in CARD_COLUMNS}
    for each in CARDS[trigger.removeprefix(f"{PAGE}-card-")].filters:
        changed[each.column] = [each]
    return changed
