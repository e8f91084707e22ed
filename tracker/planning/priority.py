"""The replacement priority list: what to replace first, with what size, and why."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping
from typing import Any

import pandas as pd

from tracker.assessment.profiles import Period
from tracker.errors import InputError
from tracker.planning.right_size import Candidate, suggested_ratings
from tracker.planning.standing import why_apart
from tracker.settings import AssessmentSettings
from tracker.store import fleet
from tracker.store.engine import Database
from tracker.store.results import APART, WITHOUT_FIGURES, latest_assessment, ranking_page

#: Columns of the list that others rely on, in this order; others may follow.
PRIORITY_COLUMNS = (
    "rank",
    "unit_id",
    "site_id",
    "feeder",
    "rated_kva",
    "peak_load_pct",
    "peak_hot_spot_c",
    "peak_hot_spot_at",
    "peak_top_oil_c",
    "hours_over_rating",
    "hours_over_hot_spot_limit",
    "aging_factor",
    "life_used_pct",
    "coverage_pct",
    "suggested_kva",
    "reasons",
)

#: Those of them that are numbers, NaN where nothing is known.
FIGURES = (
    "rated_kva",
    "peak_load_pct",
    "peak_hot_spot_c",
    "peak_top_oil_c",
    "hours_over_rating",
    "hours_over_hot_spot_limit",
    "aging_factor",
    "life_used_pct",
    "coverage_pct",
    "suggested_kva",
)

_OVER_LIMIT, _AGING_FAST, _OVER_RATING, _WITHIN, _THIN_DATA, _NO_DATA, _REMOVED = range(7)


def priority_list(database: Database) -> pd.DataFrame:
    """Order the fleet of the newest assessment by what to replace first.

    First come units over the hot-spot limit, then units aging faster than normal, then units over
    their rating, then the rest; within each, the fastest aging first, and ties by unit id. Units
    of whose energy too little was measured are ranked after all others, and those that were removed
    last.

    Returns
    -------
    DataFrame
        Columns `PRIORITY_COLUMNS`, one row a unit, rank 1 the most urgent.

    Raises
    ------
    InputError
        If there is no assessment yet.
    """
    with database.reading() as connection:
        assessment = latest_assessment(connection)
        if assessment is None:
            raise InputError("no assessment is held yet. Run `tracker assess` first.")
        rows = ranking_page(connection, assessment.key).rows
        limit_c = float(assessment.settings["hot_spot_limit_c"])
        removed = fleet.removed_units(connection)
        urgency = {
            row["unit_id"]: _REMOVED if row["unit_id"] in removed else _urgency(row) for row in rows
        }
        unfit = [
            row["unit_id"]
            for row in rows
            if row["unit_id"] not in removed and _is_unfit(row, limit_c)
        ]
        nameplates = {unit["unit_id"]: unit for unit in fleet.units(connection)}
        candidates = [
            Candidate(unit_id, nameplates[unit_id]["phases"] or 1, nameplates[unit_id]["cooling"])
            for unit_id in unfit
        ]
        suggested = suggested_ratings(
            connection,
            candidates,
            Period.between(assessment.starts_at, assessment.ends_at),
            AssessmentSettings(**assessment.settings),
        )
    rows.sort(
        key=lambda row: (urgency[row["unit_id"]], -(row["aging_factor"] or 0.0), row["unit_id"])
    )
    for rank, row in enumerate(rows, start=1):
        unit_id = row["unit_id"]
        row["rank"] = rank
        row["suggested_kva"] = suggested.get(unit_id)
        row["reasons"] = _reasons(row, limit_c, removed.get(unit_id), unfit=unit_id in suggested)
    table = pd.DataFrame(rows, columns=list(PRIORITY_COLUMNS))
    return table.astype(dict.fromkeys(FIGURES, float))  # also where all are unknown


def _is_unfit(row: Mapping[str, Any], limit_c: float) -> bool:
    """Say whether a unit is over the hot-spot limit or ages faster than normal."""
    return (row["peak_hot_spot_c"] or 0.0) > limit_c or (row["aging_factor"] or 0.0) > 1.0


def _urgency(row: Mapping[str, Any]) -> int:
    if row["standing"] == WITHOUT_FIGURES:
        return _NO_DATA
    if row["standing"] == APART:
        return _THIN_DATA
    if row["hours_over_hot_spot_limit"] > 0:
        return _OVER_LIMIT
    if row["aging_factor"] > 1.0:
        return _AGING_FAST
    return _OVER_RATING if row["hours_over_rating"] > 0 else _WITHIN


def _reasons(
    row: Mapping[str, Any], limit_c: float, removed_at: dt.datetime | None, *, unfit: bool
) -> str:
    """Say in plain words why a unit stands where it stands."""
    if removed_at is not None:
        return f"removed on {removed_at:%Y-%m-%d}"
    if row["standing"] == WITHOUT_FIGURES:
        return "no load or no air temperature is known: cannot be judged"
    reasons = []
    apart = why_apart(row)
    if apart:
        reasons.append(f"ranked apart: {apart}")
    if row["hours_over_hot_spot_limit"] > 0:
        reasons.append(
            f"hot spot over {limit_c:g} °C for {_hours(row['hours_over_hot_spot_limit'])} h, "
            f"up to {row['peak_hot_spot_c']:.0f} °C"
        )
    if row["aging_factor"] > 1.0:
        reasons.append(f"insulation aging {row['aging_factor']:.3g} times as fast as normal")
    if row["hours_over_rating"] > 0:
        reasons.append(
            f"over rating for {_hours(row['hours_over_rating'])} h, up to {row['peak_load_pct']:.0f} %"
        )
    if unfit and row["suggested_kva"] is None:
        reasons.append("no preferred rating is enough: divide the load")
    elif unfit and row["suggested_kva"] <= row["rated_kva"]:
        reasons.append(f"a new unit of {row['suggested_kva']:g} kVA and 65 °C rise would do")
    return "; ".join(reasons) or "within limits"


def _hours(hours: float) -> str:
    return f"{hours:,.0f}" if hours >= 1000 else f"{hours:.4g}"
