"""The smallest preferred rating that would stay cool enough on a unit's own load and weather."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.assessment.profiles import Period, Profiles, fleet_plan, profiles
from tracker.fleet.nameplate import Nameplate, thermal_parameters
from tracker.fleet.ratings import PREFERRED_RATINGS_KVA
from tracker.settings import AssessmentSettings
from tracker.thermal.kernel import assess_fleet


@dataclass(frozen=True, slots=True)
class Candidate:
    """A unit that is too small or ages too fast, and what a replacement must keep of it."""

    unit_id: str
    phases: int
    cooling: str | None


def suggested_ratings(
    connection: Connection,
    candidates: Sequence[Candidate],
    period: Period,
    settings: AssessmentSettings,
) -> dict[str, float | None]:
    """Find the size of a replacement for each unit.

    A replacement is a new unit of 65 °C rise, the same phases and cooling, and the default
    characteristics of its rating. It is large enough when its peak hot spot stays within the limit
    and its aging factor at or below 1.

    Returns
    -------
    dict of unit id to float or None
        The rating [kVA]; None where the largest preferred rating is not enough, or nothing counts.
    """
    by_id = {candidate.unit_id: candidate for candidate in candidates}
    plan = fleet_plan(connection, period, set(by_id))
    unit_id_of = {unit["id"]: unit["unit_id"] for unit in plan.units}
    suggested: dict[str, float | None] = dict.fromkeys(by_id)
    for batch in profiles(connection, plan):
        own = [by_id[unit_id_of[key]] for key in batch.unit_keys]
        for phases, ratings in PREFERRED_RATINGS_KVA.items():
            rows = np.array(
                [row for row, each in enumerate(own) if each.phases == phases], dtype=np.intp
            )
            for rating_kva in ratings:
                fits = _fits(batch, rows, own, rating_kva, settings)
                for row in rows[fits].tolist():
                    suggested[own[row].unit_id] = rating_kva
                rows = rows[~fits]
    return suggested


def _fits(
    batch: Profiles,
    rows: NDArray[np.intp],
    own: Sequence[Candidate],
    rating_kva: float,
    settings: AssessmentSettings,
) -> NDArray[np.bool_]:
    """Say which units a replacement of this rating would do for."""
    if not len(rows):
        return np.zeros(0, dtype=np.bool_)
    replacements = thermal_parameters(
        Nameplate(rating_kva, own[row].phases, cooling=own[row].cooling) for row in rows.tolist()
    )
    figures = assess_fleet(
        batch.load_kva[rows],
        batch.air_temp_c,
        batch.station_index[rows],
        replacements,
        batch.step_min / 60,
        hot_spot_limit_c=settings.hot_spot_limit_c,
        time_constant=settings.time_constant,
    )
    cool = figures.peak_hot_spot_c <= settings.hot_spot_limit_c  # NaN is never cool
    slow: NDArray[np.bool_] = figures.aging_hours <= figures.counted_hours
    return cool & slow
