"""A view of the ranking: its filters and its order, as the grid and as the address bar hold them.

In the address a filter reads ``column=kind:value`` (``feeder=equals:LK-11 Saltmarsh``,
``peak_hot_spot_c=from:110``, ``peak_hot_spot_c=blank``) and the order ``sort=-aging_factor,unit_id``,
the minus for the highest first.
"""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any
from urllib.parse import urlencode

from tracker.errors import InputError
from tracker.store.results import HOTTEST_FIRST, RANKING_COLUMNS, TEXT_COLUMNS, Filter

TIME_COLUMNS = frozenset({"peak_hot_spot_at"})

#: Headings of the columns people see, by the names the store, the address and the files use.
HEADINGS = {
    "unit_id": "Unit",
    "peak_hot_spot_c": "Peak hot spot, °C",
    "peak_hot_spot_at": "Peak at, UTC",
    "peak_load_pct": "Peak load, % of rating",
    "hours_over_rating": "Hours over rating",
    "hours_over_hot_spot_limit": "Hours over hot-spot limit",
    "aging_factor": "Aging factor",
    "life_used_pct": "Life used, %",
    "feeder": "Feeder",
    "rated_kva": "Rated, kVA",
    "coverage_pct": "Coverage, %",
    "peak_top_oil_c": "Peak top oil, °C",
    "site_id": "Site",
}

_KIND_OF_GRID = {
    "contains": "contains",
    "equals": "equals",
    "greaterThan": "above",
    "lessThan": "below",
    "greaterThanOrEqual": "from",
    "lessThanOrEqual": "to",
    "blank": "blank",
}
_GRID_OF_KIND = {kind: name for name, kind in _KIND_OF_GRID.items()}

#: The kinds of filter a column's menu offers, in the grid's words.
TEXT_OPTIONS = ("contains", "equals", "blank")
NUMBER_OPTIONS = (
    "greaterThan",
    "greaterThanOrEqual",
    "lessThan",
    "lessThanOrEqual",
    "equals",
    "inRange",
    "blank",
)
TIME_OPTIONS = ("greaterThan", "lessThan", "blank")

_KIND_IN_WORDS = {
    "contains": "contains",
    "equals": "is",
    "above": "above",
    "below": "below",
    "from": "at least",
    "to": "at most",
    "blank": "is blank",
}


@dataclass(frozen=True, slots=True)
class View:
    """Which units are shown, and in which order."""

    filters: tuple[Filter, ...] = ()
    sort: tuple[tuple[str, str], ...] = HOTTEST_FIRST


# --- The address bar ------------------------------------------------------------------------------


def view_from_query(query: Mapping[str, str | Sequence[str]]) -> tuple[View, list[str]]:
    """Read a view from the parts of an address.

    What is not understood is left out, and said in the list of problems.

    Examples
    --------
    >>> view, problems = view_from_query({"feeder": "equals:LK-11", "sort": "-colour"})
    >>> view.filters, problems
    ((Filter(column='feeder', kind='equals', value='LK-11'),), ["The address sorts by 'colour'...
    """
    filters: list[Filter] = []
    problems: list[str] = []
    sort: tuple[tuple[str, str], ...] = HOTTEST_FIRST
    for name, given in query.items():
        for text in [given] if isinstance(given, str) else given:
            if name == "sort":
                sort = _sort_from(text, problems)
            elif name in HEADINGS:
                _take_filter(name, text, filters, problems)
            else:
                problems.append(f"The address names {name!r}, which is no column of the ranking.")
    return View(tuple(filters), sort), problems


def query_from_view(view: View) -> str:
    """Write a view as the part of an address after the question mark.

    Examples
    --------
    >>> query_from_view(View((Filter("aging_factor", "above", 1.0),), (("unit_id", "asc"),)))
    'aging_factor=above:1&sort=unit_id'
    >>> query_from_view(View())
    ''
    """
    parts = [(each.column, _filter_text(each)) for each in view.filters]
    if view.sort != HOTTEST_FIRST:
        signs = {"asc": "", "desc": "-"}
        parts.append(("sort", ",".join(signs[way] + column for column, way in view.sort)))
    return urlencode(parts, safe=":,")


def filter_in_words(each: Filter) -> str:
    """Say a filter as a person would.

    >>> filter_in_words(Filter("hours_over_rating", "above", 0.0))
    'Hours over rating above 0'
    """
    words = f"{HEADINGS[each.column]} {_KIND_IN_WORDS[each.kind]}"
    return words if each.kind == "blank" else f"{words} {_value_text(each.value)}"


def _sort_from(text: str, problems: list[str]) -> tuple[tuple[str, str], ...]:
    sort = []
    for part in filter(None, text.split(",")):
        column, way = part.removeprefix("-"), "desc" if part.startswith("-") else "asc"
        if column in HEADINGS:
            sort.append((column, way))
        else:
            problems.append(f"The address sorts by {column!r}, which is no column of the ranking.")
    return tuple(sort) or HOTTEST_FIRST


def _take_filter(column: str, text: str, filters: list[Filter], problems: list[str]) -> None:
    kind, _, value = text.partition(":")
    try:
        filters.append(_checked(column, kind, value))
    except InputError as error:
        problems.append(f"The address filters by {column}={text}: {error}")


def _filter_text(each: Filter) -> str:
    return each.kind if each.kind == "blank" else f"{each.kind}:{_value_text(each.value)}"


def _value_text(value: object) -> str:
    if isinstance(value, float):
        return f"{value:.12g}"
    if isinstance(value, dt.datetime):
        return f"{value:%Y-%m-%d}"
    return str(value)


# --- The grid -------------------------------------------------------------------------------------


def view_from_grid(request: Mapping[str, Any]) -> View:
    """Read a view from what the grid asks for.

    Raises
    ------
    InputError
        If it asks for a column or a filter that is none of ours.
    """
    filters: list[Filter] = []
    for column, condition in _mapping(request.get("filterModel")).items():
        filters.extend(_filters_of(str(column), _mapping(condition)))
    sort = tuple(
        (_known(str(_mapping(each).get("colId"))), str(_mapping(each).get("sort")))
        for each in request.get("sortModel") or ()
    )
    return View(tuple(filters), sort or HOTTEST_FIRST)


def grid_filters(filters: Iterable[Filter]) -> dict[str, Any]:
    """Write filters as the grid holds them, one condition a column.

    Examples
    --------
    >>> grid_filters([Filter("aging_factor", "from", 1.0), Filter("aging_factor", "to", 4.0)])
    {'aging_factor': {'filterType': 'number', 'type': 'inRange', 'filter': 1.0, 'filterTo': 4.0}}
    """
    model: dict[str, Any] = {}
    for each in filters:
        before = model.get(each.column)
        if before and before["type"] == "greaterThanOrEqual" and each.kind == "to":
            model[each.column] = {**before, "type": "inRange", "filterTo": each.value}
        else:
            model[each.column] = _condition(each)
    return model


def _condition(each: Filter) -> dict[str, Any]:
    condition: dict[str, Any] = {
        "filterType": _filter_type(each.column),
        "type": _GRID_OF_KIND[each.kind],
    }
    if isinstance(each.value, dt.datetime):
        condition["dateFrom"] = f"{each.value:%Y-%m-%d %H:%M:%S}"
    elif each.kind != "blank":
        condition["filter"] = each.value
    return condition


def _filters_of(column: str, condition: Mapping[str, Any]) -> list[Filter]:
    kind = str(condition.get("type"))
    value = condition.get("dateFrom" if column in TIME_COLUMNS else "filter")
    if kind == "inRange":
        return [
            _checked(column, "from", value),
            _checked(column, "to", condition.get("filterTo")),
        ]
    return [_checked(column, _KIND_OF_GRID.get(kind, kind), value)]


def _checked(column: str, kind: str, value: object) -> Filter:
    """Return a filter whose column, kind and value fit each other."""
    offered = {"text": TEXT_OPTIONS, "number": NUMBER_OPTIONS, "date": TIME_OPTIONS}
    kinds = [
        _KIND_OF_GRID[option]
        for option in offered[_filter_type(_known(column))]
        if option in _KIND_OF_GRID
    ]
    if kind not in kinds:
        raise InputError(f"filter {kind!r} does not fit {column}; allowed: {', '.join(kinds)}.")
    if kind == "blank":
        return Filter(column, kind)
    if column in TEXT_COLUMNS:
        return Filter(column, kind, str(value))
    return Filter(column, kind, _moment(value) if column in TIME_COLUMNS else _number(value))


def _known(column: str) -> str:
    if column not in HEADINGS or column not in RANKING_COLUMNS:
        raise InputError(
            f"column {column!r} is not in the ranking; allowed: {', '.join(HEADINGS)}."
        )
    return column


def _filter_type(column: str) -> str:
    if column in TEXT_COLUMNS:
        return "text"
    return "date" if column in TIME_COLUMNS else "number"


def _number(value: object) -> float:
    try:
        number = float(str(value))
    except ValueError:
        number = math.nan
    if not math.isfinite(number):
        raise InputError(f"{value!r} is not a number; write for instance 110 or 0.5.")
    return number


def _moment(value: object) -> dt.datetime:
    try:
        return dt.datetime.fromisoformat(str(value)).replace(tzinfo=dt.UTC)
    except ValueError as error:
        raise InputError(f"{value!r} is not a date; write for instance 2026-07-01.") from error


def _mapping(value: object) -> Mapping[str, Any]:
    return value if isinstance(value, Mapping) else {}
