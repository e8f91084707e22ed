"""Pieces that stand on more than one page."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import PurePath
from typing import Any, TypeAlias
from urllib.parse import urlencode

from dash import html
from dash.development.base_component import Component

from tracker.dashboard.words import Heat, counted, decimals, moment
from tracker.fleet.cautions import CAUTIONS, NO_PERMISSION
from tracker.settings import AssessmentSettings
from tracker.store.engine import Database
from tracker.store.results import AssessmentRow

#: What an element may hold.
Child: TypeAlias = str | Component | None

METHODS = {"c57.91": "IEEE C57.91 clause 7"}
TIME_CONSTANTS = {"corrected": "corrected time constant", "rated": "rated time constant"}


def aria(**names: str) -> dict[str, Any]:
    """Return attributes for those who listen to a page: `aria(label="Units")`."""
    return {f"aria-{name}": value for name, value in names.items()}


def facts(pairs: Iterable[tuple[str, Child]], class_name: str) -> html.Dl:
    """Return names and what belongs to each, side by side."""
    return html.Dl(
        [html.Div([html.Dt(name), html.Dd(value)]) for name, value in pairs], className=class_name
    )


def store_name(database: Database) -> str:
    """Return what people call the store: its file, or its database, without the way to it."""
    return PurePath(database.engine.url.database or "in memory").name


def assessment_strip(database: Database, assessment: AssessmentRow) -> html.Dl:
    """Say what the figures on the page were made from, and how."""
    settings = AssessmentSettings(**assessment.settings)
    return facts(
        [
            ("Store", store_name(database)),
            ("Period, UTC", f"{moment(assessment.starts_at)} to {moment(assessment.ends_at)}"),
            ("Assessed, UTC", moment(assessment.made_at)),
            ("Method", f"{METHODS[settings.method]}, {TIME_CONSTANTS[settings.time_constant]}"),
            ("Hot-spot limit in force", f"{settings.hot_spot_limit_c:g} °C"),
            ("Normal insulation life", f"{settings.life_h:,.0f} h"),
        ],
        "strip",
    )


def staleness(files: int) -> Component | None:
    """Say that files came in after the assessment; nothing when none did."""
    if not files:
        return None
    return notice(
        f"{counted(files, 'file has', 'files have')} come in since this assessment was made and "
        "stand in none of its figures. ",
        html.Code("tracker assess"),
        " brings them up to date.",
    )


def unit_address(unit_id: str) -> str:
    """Return the address of a unit's page, seen from another page."""
    return f"unit?{urlencode({'unit_id': unit_id})}"


def notice(*children: Child) -> html.Div:
    """Return a message that asks for something to be done."""
    return html.Div(html.P(list(children)), className="notice", role="status")


def commands(lines: Iterable[str]) -> html.Pre:
    """Return commands to type, one a line."""
    return html.Pre(html.Code("\n".join(lines)), className="commands")


def heat_mark(peak_c: float, heat: Heat) -> html.Span:
    """Return a hot spot on the colour scale, its figure on it and its meaning beside it."""
    return html.Span(
        [
            html.Span(decimals(peak_c, 1), className=f"heat heat-{heat.step}"),
            html.Span(heat.words, className="heat-words"),
        ],
        className="heat-mark",
    )


def first_caution() -> html.P:
    """Return the caution that stands above the figures, and the way to the others."""
    return html.P(
        [
            html.Strong(NO_PERMISSION.matter),
            f" {NO_PERMISSION.text} ",
            html.A("All cautions", href="#cautions"),
        ],
        className="first-caution",
    )


def cautions() -> html.Section:
    """Return all cautions."""
    return html.Section(
        [
            html.H2("Cautions", id="cautions"),
            html.Ul(
                [html.Li([html.Strong(each.matter), f" {each.text}"]) for each in CAUTIONS],
            ),
        ],
        className="cautions",
        **aria(labelledby="cautions"),
    )
