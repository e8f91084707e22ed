"""Assessments and their results: written once, then read a page at a time."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from sqlalchemy import (
    ColumnElement,
    Connection,
    Select,
    and_,
    case,
    delete,
    func,
    insert,
    or_,
    select,
    update,
)

from tracker.errors import InputError
from tracker.settings import LEAST_COVERAGE_PCT
from tracker.store.models import Assessment, IntakeFile, Site, Unit, UnitResult

#: Columns of the ranking: by these names people sort, filter and print.
RANKING_COLUMNS: dict[str, ColumnElement[Any]] = {
    "unit_id": Unit.unit_id.expression,
    "site_id": Site.site_id.expression,
    "feeder": Site.feeder.expression,
    "rated_kva": Unit.rated_kva.expression,
    "winding_rise_c": Unit.winding_rise_c.expression,
    "peak_load_pct": UnitResult.peak_load_pct.expression,
    "peak_hot_spot_c": UnitResult.peak_hot_spot_c.expression,
    "peak_hot_spot_at": UnitResult.peak_hot_spot_at.expression,
    "peak_top_oil_c": UnitResult.peak_top_oil_c.expression,
    "hours_over_rating": UnitResult.hours_over_rating.expression,
    "hours_over_hot_spot_limit": UnitResult.hours_over_hot_spot_limit.expression,
    "aging_factor": UnitResult.aging_factor.expression,
    "life_used_pct": UnitResult.life_used_pct.expression,
    "coverage_pct": UnitResult.coverage_pct.expression,
}

TEXT_COLUMNS = frozenset({"unit_id", "site_id", "feeder"})
HOUR_COLUMNS = frozenset({"hours_over_rating", "hours_over_hot_spot_limit"})
#: An assessment not finished by then was interrupted.
FORGOTTEN_AFTER = dt.timedelta(days=1)

#: Where a unit stands whatever the order: among the others, apart for too little of its energy was
#: measured, or last for nothing is known.
RANKED, APART, WITHOUT_FIGURES = range(3)
_STANDING = case(
    (UnitResult.peak_hot_spot_c.is_(None), WITHOUT_FIGURES),
    (UnitResult.coverage_pct < LEAST_COVERAGE_PCT, APART),
    else_=RANKED,
)

HOTTEST_FIRST = (("peak_hot_spot_c", "desc"),)


@dataclass(frozen=True, slots=True)
class AssessmentRow:
    """One run of the thermal model: its settings and what it was made from."""

    key: int
    made_at: dt.datetime
    program_version: str
    settings: Mapping[str, Any]
    starts_at: dt.datetime
    ends_at: dt.datetime
    data_fingerprint: str


@dataclass(frozen=True, slots=True)
class Filter:
    """A condition on a column of the ranking.

    `kind` is one of: contains, equals (text); equals, above, below, from, to (numbers, times);
    blank.
    """

    column: str
    kind: str
    value: float | str | dt.datetime | None = None


@dataclass(frozen=True, slots=True)
class RankingPage:
    """Some rows of the ranking, and how many there are in all."""

    rows: list[dict[str, Any]]
    total: int


def latest_assessment(connection: Connection) -> AssessmentRow | None:
    """Return the newest finished assessment; None when there is none."""
    row = connection.execute(
        select(
            Assessment.id,
            Assessment.made_at,
            Assessment.program_version,
            Assessment.settings,
            Assessment.starts_at,
            Assessment.ends_at,
            Assessment.data_fingerprint,
        )
        .where(Assessment.finished_at.is_not(None))
        .order_by(Assessment.id.desc())
        .limit(1)
    ).first()
    return None if row is None else AssessmentRow(*row)


def begin_assessment(connection: Connection, **columns: Any) -> int:
    """Insert an assessment, shown to nobody until it is finished, and return its key.

    Clears away what was begun long ago and never finished.
    """
    now = dt.datetime.now(dt.UTC)
    forgotten = Assessment.finished_at.is_(None) & (Assessment.made_at < now - FORGOTTEN_AFTER)
    connection.execute(delete(Assessment).where(forgotten))
    values = {"made_at": now, "data_fingerprint": "", **columns}
    inserted = connection.execute(insert(Assessment).values(**values)).inserted_primary_key
    assert inserted is not None
    return int(inserted[0])


def finish_assessment(connection: Connection, key: int, data_fingerprint: str) -> None:
    """Show an assessment from now on."""
    connection.execute(
        update(Assessment)
        .where(Assessment.id == key)
        .values(finished_at=dt.datetime.now(dt.UTC), data_fingerprint=data_fingerprint)
    )


def add_results(connection: Connection, rows: Sequence[Mapping[str, Any]]) -> None:
    """Insert the results of many units."""
    if rows:
        connection.execute(insert(UnitResult), list(rows))


def ranking_page(
    connection: Connection,
    assessment_key: int,
    *,
    start: int = 0,
    stop: int | None = None,
    sort: Sequence[tuple[str, str]] = HOTTEST_FIRST,
    filters: Sequence[Filter] = (),
) -> RankingPage:
    """Return rows ``[start, stop)`` of the ranking, sorted and filtered in the database.

    Whatever the order, units of which too little was measured come after all others, and those
    without figures last; the column `standing` tells which they are.

    Parameters
    ----------
    sort : sequence of (column, "asc" or "desc")
        Units without a value in the column come last either way; ties break by unit id.

    Raises
    ------
    InputError
        If a column or a kind of filter is not known.
    """
    query = _joined(assessment_key).where(*(_condition(each) for each in filters))
    total = connection.scalar(select(func.count()).select_from(query.subquery())) or 0
    query = query.order_by(_STANDING)
    for name, direction in sort:
        column = _column(name)
        if direction not in ("asc", "desc"):
            raise InputError(f"sort direction {direction!r} is not known; allowed: asc, desc.")
        query = query.order_by(
            _is_unknown(name), column.desc() if direction == "desc" else column.asc()
        )
    query = query.order_by(Unit.unit_id).offset(start)
    if stop is not None:
        query = query.limit(max(stop - start, 0))
    return RankingPage([dict(row._mapping) for row in connection.execute(query)], total)


def count_units(
    connection: Connection, assessment_key: int, groups: Mapping[str, Sequence[Filter]]
) -> dict[str, int]:
    """Count the units that meet each group's filters, all groups in one statement.

    Raises
    ------
    InputError
        If a column or a kind of filter is not known.
    """
    joined = _joined(assessment_key)
    counts = [
        func.count().filter(and_(True, *map(_condition, filters))).label(name)
        for name, filters in groups.items()
    ]
    row = connection.execute(joined.with_only_columns(*counts, maintain_column_froms=True)).one()
    return {name: int(count) for name, count in row._mapping.items()}


def hotter_units(connection: Connection, assessment_key: int, unit_id: str) -> int:
    """Count the units that come before one in the order of peak hot spots, ties by unit id.

    Units that are ranked apart come before no other.
    """
    peak_c = RANKING_COLUMNS["peak_hot_spot_c"]
    one = _joined(assessment_key).where(Unit.unit_id == unit_id).subquery()
    hotter = or_(
        peak_c > one.c.peak_hot_spot_c,
        and_(peak_c == one.c.peak_hot_spot_c, Unit.unit_id < unit_id),
    )
    query = _joined(assessment_key).where(hotter, _STANDING == RANKED, one.c.unit_id.is_not(None))
    counted = query.with_only_columns(func.count(), maintain_column_froms=True)
    return connection.scalar(counted) or 0


def files_since(connection: Connection, made_at: dt.datetime) -> int:
    """Count the files that changed the store after a moment, such as an assessment's making."""
    query = select(func.count()).where(
        IntakeFile.imported_at > made_at, IntakeFile.taken + IntakeFile.corrected > 0
    )
    return connection.scalar(query) or 0


def has_units(connection: Connection) -> bool:
    """Say whether the store holds any unit, assessed or not."""
    return connection.scalar(select(Unit.id).limit(1)) is not None


def feeders(connection: Connection) -> list[str]:
    """Return the feeders of the fleet, in order."""
    query = select(Site.feeder).where(Site.feeder.is_not(None)).distinct().order_by(Site.feeder)
    return [str(feeder) for feeder in connection.scalars(query)]


def _joined(assessment_key: int) -> Select[Any]:
    return (
        select(
            *(column.label(name) for name, column in RANKING_COLUMNS.items()),
            _STANDING.label("standing"),
        )
        .join_from(UnitResult, Unit, UnitResult.unit_key == Unit.id)
        .outerjoin(Site, UnitResult.site_key == Site.id)
        .where(UnitResult.assessment_key == assessment_key)
    )


def _column(name: str) -> ColumnElement[Any]:
    if name not in RANKING_COLUMNS:
        raise InputError(
            f"column {name!r} is not in the ranking; choose from {', '.join(RANKING_COLUMNS)}."
        )
    return RANKING_COLUMNS[name]


def _is_unknown(name: str) -> ColumnElement[bool]:
    """Say whether a unit has no figure in a column; hours of nothing counted are none."""
    if name in HOUR_COLUMNS:
        return RANKING_COLUMNS["peak_hot_spot_c"].is_(None)
    return _column(name).is_(None)


def _condition(each: Filter) -> ColumnElement[bool]:
    column = _column(each.column)
    if each.kind == "blank":
        return column.is_(None)
    if each.column in TEXT_COLUMNS:
        text = str(each.value)
        if each.kind == "contains":
            return column.icontains(text, autoescape=True)
        if each.kind == "equals":
            return or_(column == text)
    else:
        comparisons = {
            "equals": column == each.value,
            "above": column > each.value,
            "below": column < each.value,
            "from": column >= each.value,
            "to": column <= each.value,
        }
        if each.kind in comparisons:
            return comparisons[each.kind]
    raise InputError(f"filter {each.kind!r} on column {each.column!r} is not known.")
