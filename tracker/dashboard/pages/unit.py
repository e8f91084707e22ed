"""Page "Unit": one transformer, its figures, its trace, and what is known of it."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

import dash_mantine_components as dmc
import numpy as np
from dash import (
    ClientsideFunction,
    Dash,
    Input,
    Output,
    State,
    dcc,
    html,
    no_update,
    register_page,
)
from dash.development.base_component import Component

from tracker.assessment.trace import UnitTrace, unit_trace
from tracker.dashboard import parts
from tracker.dashboard.figures import (
    FIGURE_HEIGHT,
    MOST_POINTS,
    Limits,
    hours_of,
    lanes_of,
    limit_lines,
    unit_figure,
)
from tracker.dashboard.words import (
    LOAD_ORIGINS,
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
from tracker.fleet.cautions import assumed_pcb
from tracker.fleet.nameplate import CHARACTERISTICS, Origin, completed
from tracker.planning.standing import why_apart
from tracker.settings import AssessmentSettings
from tracker.store.engine import Database
from tracker.store.fleet import Span, UnitRecord, unit_record
from tracker.store.results import (
    AssessmentRow,
    Filter,
    files_since,
    hotter_units,
    latest_assessment,
    ranking_page,
)

PAGE = "unit"
UNIT, HEAD, NEWS, FACTS = f"{PAGE}-id", f"{PAGE}-head", f"{PAGE}-news", f"{PAGE}-facts"
TRACE, FIGURE, SPAN, NOTE = f"{PAGE}-trace", f"{PAGE}-figure", f"{PAGE}-span", f"{PAGE}-note"
PLATE, BACK, RANGES = f"{PAGE}-plate", f"{PAGE}-back", f"{PAGE}-ranges"

#: Stretches around the hottest moment that one press shows, by the name the address uses.
SPANS = {
    "all": "Whole period",
    "month": "Hottest month",
    "week": "Hottest week",
    "day": "Hottest day",
}
_DAYS_OF_SPAN = {"month": 30, "week": 7, "day": 1}

#: Figures of the nameplate: heading and unit, by the names of the register.
PLATE_FIGURES = {
    "rated_kva": ("Rating", "kVA"),
    "hv_volts": ("High-side voltage", "V"),
    "lv_volts": ("Low-side voltage", "V"),
    "impedance_pct": ("Impedance", "%"),
    "mounting": ("Mounting", ""),
    "year_made": ("Year made", ""),
    "phases": ("Phases", ""),
    "winding_rise_c": ("Average winding rise", "°C"),
    "cooling": ("Cooling class", ""),
    "no_load_loss_w": ("No-load loss", "W"),
    "load_loss_w": ("Load loss at rated load", "W"),
    "loss_ratio": ("Loss ratio R", ""),
    "top_oil_rise_c": ("Top-oil rise over ambient", "K"),
    "hot_spot_rise_c": ("Hot-spot rise over ambient", "K"),
    "oil_exponent": ("Oil exponent n", ""),
    "winding_exponent": ("Winding exponent m", ""),
    "top_oil_time_constant_h": ("Top-oil time constant", "h"),
    "winding_time_constant_h": ("Winding time constant", "h"),
}

ORIGINS: dict[Origin, str] = {
    "given": "in the register",
    "derived": "worked out from figures in the register",
    "assumed": "not in the register; taken from the table of defaults",
}
PlateOrigin = Literal["given", "derived", "assumed", "not given"]


# --- Pure functions -------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class UnitPage:
    """What the page says of a unit, its trace aside."""

    record: UnitRecord
    assessment: AssessmentRow | None
    row: Mapping[str, Any] | None  #: the unit's row of the ranking
    hotter: int  #: units before it in the ranking
    assessed: int  #: units in the ranking
    files_since: int


@dataclass(frozen=True, slots=True)
class PlateRow:
    """A figure of the nameplate as people read it."""

    heading: str
    value: str
    origin: PlateOrigin


def unit_page(database: Database, unit_id: str) -> UnitPage:
    """Read what the page says of a unit.

    Raises
    ------
    InputError
        If there is no such unit.
    """
    with database.reading() as connection:
        record = unit_record(connection, unit_id)
        assessment = latest_assessment(connection)
        if assessment is None:
            return UnitPage(record, None, None, 0, 0, 0)
        own = Filter("unit_id", "equals", record.unit_id)
        rows = ranking_page(connection, assessment.key, filters=[own]).rows
        known = rows[0] if rows and rows[0]["peak_hot_spot_c"] is not None else None
        place = hotter_units(connection, assessment.key, record.unit_id) if known else 0
        total = ranking_page(connection, assessment.key, stop=0).total
        since = files_since(connection, assessment.made_at)
    return UnitPage(record, assessment, rows[0] if rows else None, place, total, since)


def place_words(page: UnitPage) -> str:
    """Say where the unit stands in the ranking, which it is no part of when it stands apart."""
    if page.row is not None and why_apart(page.row):
        return "ranked apart"
    return f"{page.hotter + 1:,} of {page.assessed:,}"


def plate_rows(record: UnitRecord) -> list[PlateRow]:
    """Return the nameplate's figures with their origins, those that heat depends on filled in."""
    figures = completed(record.nameplate)
    rows = []
    for name, (heading, unit) in PLATE_FIGURES.items():
        origin: PlateOrigin = "given"
        value: float | str | None
        if name in CHARACTERISTICS:
            value, origin = figures[name].value, figures[name].origin
        else:
            value = getattr(record.nameplate, name, None) or getattr(record, name, None)
        if value is None:
            rows.append(PlateRow(heading, NONE, "not given"))
        else:
            text = str(value) if name == "year_made" else plain(value)
            rows.append(PlateRow(heading, f"{text} {unit}".strip(), origin))
    return rows


def trace_for(database: Database, unit_id: str) -> tuple[UnitTrace, Limits]:
    """Compute a unit's trace over the period of the newest assessment, with its settings.

    Raises
    ------
    InputError
        If the unit is unknown, nothing has been assessed, or no load is held.
    """
    with database.reading() as connection:
        record = unit_record(connection, unit_id)
        assessment = latest_assessment(connection)
    if assessment is None:
        raise InputError("nothing has been assessed yet. Run `tracker assess`.")
    settings = AssessmentSettings(**assessment.settings)
    trace = unit_trace(
        database,
        unit_id,
        starts_at=assessment.starts_at,
        ends_at=assessment.ends_at,
        settings=settings,
    )
    limits = Limits(
        record.nameplate.rated_kva,
        reference_hot_spot_c(record.nameplate.winding_rise_c),
        settings.hot_spot_limit_c,
        settings.life_h,
    )
    return trace, limits


def span_of(trace: UnitTrace, name: str) -> tuple[dt.datetime, dt.datetime]:
    """Return a stretch of a trace by its name, whole days in UTC around the hottest moment."""
    whole = (_moment(trace.interval_start_s[0]), _moment(trace.interval_start_s[-1]) + _step(trace))
    hot_spot_c = np.where(trace.counted, trace.hot_spot_c, np.nan)
    if name not in _DAYS_OF_SPAN or not np.isfinite(hot_spot_c).any():
        return whole
    days = _DAYS_OF_SPAN[name]
    peak_at = _moment(trace.interval_start_s[int(np.nanargmax(hot_spot_c))])
    peak_day = peak_at.replace(hour=0, minute=0, second=0)
    start = peak_day - dt.timedelta(days=days // 2)
    return max(start, whole[0]), min(start + dt.timedelta(days=days), whole[1])


def missing_words(trace: UnitTrace) -> str:
    """Say in plain words what a trace lacks; empty when nothing."""
    load, air = np.isnan(trace.load_kva), np.isnan(trace.air_temp_c)
    if load.all():
        return "No load is held of this unit's sites in the period, so nothing can be computed."
    if air.all():
        return (
            "No air temperature is held for this unit's site in the period. "
            "Import its weather station, or name the station in the register."
        )
    if not trace.counted.any():
        return (
            "Too little is known: all of it lies in the 24 h that bring the thermal state to life, "
            "which count in no figure."
        )
    lacks = []
    for gap, what in ((load, "load"), (air & ~load, "air temperature")):
        hours = np.count_nonzero(gap) * trace.step_h
        if hours:
            lacks.append(f"{hours:,.0f} h without {what}")
    return f"Gaps: {' and '.join(lacks)}; they count in no figure." if lacks else ""


def origin_words(trace: UnitTrace) -> str:
    """Say in plain words how load and air temperature came about; empty where neither is known.

    A gap in the load is no part of it: `missing_words` speaks of those.
    """
    known = np.isfinite(trace.load_kva)
    if not known.any():
        return ""
    energy = trace.load_kva[known]
    measured = float(np.sum(energy * trace.measured_share[known]))
    share = measured / float(energy.sum()) if energy.any() else 1.0
    lanes = [f"{LOAD_ORIGINS[flag]} in {hours_of(trace, flag):,.4g} h" for flag in lanes_of(trace)]
    if share == 1.0 and not lanes:
        words = "All of the load was measured."
    else:
        words = f"Of the load's energy {decimals(100 * share, 1)} % was measured."
    if lanes:
        words += f" Some of the load is {_listed(lanes)}."
    bridged_h = np.count_nonzero(trace.air_filled) * trace.step_h
    if bridged_h:
        words += f" The air temperature is bridged by a straight line in {bridged_h:,.4g} h."
    return words


def _listed(words: list[str]) -> str:
    """Join words as a person would.

    >>> _listed(["a", "b", "c"]), _listed(["a"])
    ('a, b and c', 'a')
    """
    return " and ".join(filter(None, (", ".join(words[:-1]), words[-1])))


def _moment(seconds: np.int64) -> dt.datetime:
    return dt.datetime.fromtimestamp(int(seconds), dt.UTC)


def _step(trace: UnitTrace) -> dt.timedelta:
    return dt.timedelta(hours=trace.step_h)


# --- Layout ---------------------------------------------------------------------------------------


def layout(unit_id: Any = "", span: Any = "all", **_others: Any) -> html.Main:
    """Return the page without data: Dash calls every layout once, without arguments."""
    return html.Main(
        [
            html.Nav(
                html.A("← Ranking", href=".", id=BACK), className="back", **parts.aria(label="Back")
            ),
            html.Div(id=HEAD, className="page-head"),
            parts.first_caution(),
            html.Div(id=NEWS),
            html.Div(id=FACTS),
            html.Section(
                [
                    html.Div(
                        [
                            html.H2("Load, temperatures and aging", id=f"{PAGE}-trace-heading"),
                            dmc.SegmentedControl(
                                id=SPAN,
                                data=[{"value": v, "label": label} for v, label in SPANS.items()],
                                value=span if isinstance(span, str) and span in SPANS else "all",
                                size="sm",
                                className="spans",
                            ),
                        ],
                        className="section-head",
                    ),
                    html.Div(html.P("Computing the temperatures …"), id=NOTE, className="note"),
                    dcc.Graph(
                        id=FIGURE,
                        figure={
                            "layout": {"xaxis": {"visible": False}, "yaxis": {"visible": False}}
                        },
                        config={
                            "displaylogo": False,
                            "responsive": True,
                            "scrollZoom": False,
                            # Named one by one: others send the figure to a host of its library's makers.
                            "modeBarButtons": [["zoom2d", "resetScale2d", "toImage"]],
                        },
                        style={"height": f"{FIGURE_HEIGHT}px"},
                    ),
                ],
                id=TRACE,
                className="panel",
                hidden=False,
                **parts.aria(labelledby=f"{PAGE}-trace-heading"),
            ),
            html.Div(id=PLATE),
            parts.cautions(),
            dcc.Store(id=UNIT, data=unit_id if isinstance(unit_id, str) else ""),
            dcc.Store(id=RANGES),
        ],
        id=f"{PAGE}-page",
    )


def _unknown(message: str) -> list[Component]:
    return [html.H1("Unit not found"), parts.notice(message)]


def _head(page: UnitPage) -> list[Component]:
    record, site = page.record, page.record.site or {}
    details = [f"{plain(record.nameplate.rated_kva)} kVA", record.mounting, site.get("feeder")]
    if site and site["site_id"] != record.unit_id:
        details.append(f"site {site['site_id']}")
    if site.get("customers") is not None:
        details.append(counted(site["customers"], "customer", "customers"))
    if site.get("critical_customers"):
        details.append(f"{site['critical_customers']:,} critical")
    return [
        html.H1(record.unit_id),
        html.P(" · ".join(str(each) for each in details if each), className="lead"),
    ]


def _news(page: UnitPage, database: Database) -> list[Component | None]:
    if page.assessment is None:
        return [
            parts.notice("Nothing has been assessed yet. Run ", html.Code("tracker assess"), ".")
        ]
    if page.row is None:
        return [
            parts.staleness(page.files_since),
            parts.notice(
                f"This unit is not in the assessment of {moment(page.assessment.made_at)} UTC. Run ",
                html.Code("tracker assess"),
                ".",
            ),
        ]
    if page.row["peak_hot_spot_c"] is None:
        trace, _ = trace_for(database, page.record.unit_id)
        return [parts.staleness(page.files_since), parts.notice(missing_words(trace))]
    apart = why_apart(page.row)
    return [
        parts.staleness(page.files_since),
        parts.notice(f"Ranked apart: {apart}. Its peaks and its aging may lie in what is missing.")
        if apart
        else None,
    ]


def _key_figures(page: UnitPage, database: Database) -> list[Component]:
    if page.assessment is None:
        return []
    strip = parts.assessment_strip(database, page.assessment)
    row = page.row
    if row is None or row["peak_hot_spot_c"] is None:
        return [strip]
    limit_c = AssessmentSettings(**page.assessment.settings).hot_spot_limit_c
    heat = heat_of(row["peak_hot_spot_c"], reference_hot_spot_c(row["winding_rise_c"]), limit_c)
    figures: list[tuple[str, parts.Child]] = [
        ("Peak hot spot, °C", parts.heat_mark(row["peak_hot_spot_c"], heat)),
        ("Peak at, UTC", moment(row["peak_hot_spot_at"])),
        ("Place by hot spot", place_words(page)),
        ("Peak load", f"{decimals(row['peak_load_pct'], 0)} % of rating"),
        ("Peak top oil", f"{decimals(row['peak_top_oil_c'], 1)} °C"),
        ("Over rating", f"{decimals(row['hours_over_rating'], 1)} h"),
        (f"Over {limit_c:g} °C hot spot", f"{decimals(row['hours_over_hot_spot_limit'], 1)} h"),
        ("Aging factor", f"{significant(row['aging_factor'])} × normal"),
        ("Life used in the period", f"{significant(row['life_used_pct'])} %"),
        ("Coverage", f"{decimals(row['coverage_pct'], 1)} %"),
    ]
    return [strip, parts.facts(figures, "key-figures")]


def _plate(record: UnitRecord) -> list[Component]:
    rows = plate_rows(record)
    assumed = sum(row.origin == "assumed" for row in rows)
    pcb = (
        f"{f'Made {record.year_made}' if record.year_made else 'Year made not given'}: "
        "assumed PCB-contaminated until tested."
        if assumed_pcb(record.year_made)
        else None
    )
    table = html.Table(
        [
            html.Caption(
                f"{counted(assumed, 'figure', 'figures')} that heat depends on "
                f"{'is' if assumed == 1 else 'are'} assumed."
            ),
            html.Thead(
                html.Tr([html.Th(each, scope="col") for each in ("Figure", "Value", "Origin")])
            ),
            html.Tbody(
                [
                    html.Tr(
                        [
                            html.Th(row.heading, scope="row"),
                            html.Td(row.value),
                            html.Td(
                                html.Span(
                                    row.origin,
                                    className=f"origin origin-{row.origin.replace(' ', '-')}",
                                )
                            ),
                        ]
                    )
                    for row in rows
                ]
            ),
        ],
        className="plate",
    )
    return [
        html.Section(
            [
                html.H2("Nameplate", id=f"{PAGE}-plate-heading"),
                parts.notice(pcb) if pcb else None,
                html.Div(
                    [
                        table,
                        html.Div(
                            [
                                html.H3("Where a figure comes from"),
                                parts.facts(ORIGINS.items(), "origins"),
                                html.H3("Where it stood"),
                                _placements(record.placements),
                            ],
                            className="beside",
                        ),
                    ],
                    className="two-columns",
                ),
            ],
            className="panel",
            **parts.aria(labelledby=f"{PAGE}-plate-heading"),
        )
    ]


def _placements(placements: Any) -> Component:
    if not placements:
        return html.P("At no site yet.")
    spans: list[tuple[str, Span]] = list(placements)
    return html.Ul([html.Li(f"site {site_id}, {span}") for site_id, span in spans])


def _note(trace: UnitTrace, limits: Limits) -> list[str | Component]:
    far = [f"{line.words} {line.value:g} °C" for line in limit_lines(trace, limits)[1]]
    stamps = (
        "Times are UTC and mark the start of an interval; load and air are its mean, "
        "top oil and hot spot stand at its end."
    )
    sentences = [
        origin_words(trace),
        "The lanes below the load show where." if lanes_of(trace) else "",
        missing_words(trace),
        stamps,
        f"Not drawn, well above these temperatures: {', '.join(far)}." if far else "",
        (
            f"Of its {len(trace.load_kva):,} intervals the lowest and highest of each stretch are drawn."
            if len(trace.load_kva) > MOST_POINTS
            else ""
        ),
        "The shaded warm-up counts in no figure.",
        "Drag across a figure to zoom, double-press to go back.",
    ]
    return [html.P(" ".join(filter(None, sentences)))]


# --- Callbacks ------------------------------------------------------------------------------------


def register(app: Dash, database: Database) -> None:
    """Attach the page and its callbacks to `app`."""
    register_page(PAGE, path="/unit", name="Unit", title="Unit - tracker", layout=layout)
    _register_facts(app, database)
    _register_figure(app, database)
    app.clientside_callback(
        ClientsideFunction("tracker", "backToRanking"), Output(BACK, "href"), Input(UNIT, "data")
    )
    app.clientside_callback(
        ClientsideFunction("tracker", "nameTab"),
        Output(HEAD, "title"),
        Input(HEAD, "children"),
        State(UNIT, "data"),
        prevent_initial_call=True,
    )
    app.clientside_callback(
        ClientsideFunction("tracker", "showSpan"),
        Output(RANGES, "modified_timestamp"),
        Input(SPAN, "value"),
        State(RANGES, "data"),
        prevent_initial_call=True,
    )


def _register_facts(app: Dash, database: Database) -> None:
    @app.callback(
        Output(HEAD, "children"),
        Output(NEWS, "children"),
        Output(FACTS, "children"),
        Output(PLATE, "children"),
        Input(UNIT, "data"),
    )
    def _facts(unit_id: str) -> tuple[Any, ...]:
        if not unit_id:
            return (_unknown("The address names no unit: choose one from the ranking."), [], [], [])
        try:
            page = unit_page(database, unit_id)
            news = _news(page, database)
        except TrackerError as error:
            return (_unknown(str(error)), [], [], [])
        return _head(page), news, _key_figures(page, database), _plate(page.record)


def _register_figure(app: Dash, database: Database) -> None:
    @app.callback(
        Output(FIGURE, "figure"),
        Output(TRACE, "hidden"),
        Output(NOTE, "children"),
        Output(RANGES, "data"),
        Input(UNIT, "data"),
        State(SPAN, "value"),
    )
    def _draw(unit_id: str, name: str) -> tuple[Any, ...]:
        nothing = (no_update, True, no_update, no_update)
        try:
            trace, limits = trace_for(database, unit_id)
        except TrackerError:
            return nothing  # the reason stands above, from the facts
        if not np.isfinite(trace.hot_spot_c).any():
            return nothing
        ranges = {
            each: [f"{moment:%Y-%m-%d %H:%M}" for moment in span_of(trace, each)] for each in SPANS
        }
        figure = unit_figure(trace, limits, span_of(trace, name))
        return figure, False, _note(trace, limits), ranges
