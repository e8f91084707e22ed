"""One unit, interval by interval: computed when somebody looks, by the readable form."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.assessment.profiles import chosen_period, fleet_plan, profiles
from tracker.errors import InputError
from tracker.settings import AssessmentSettings
from tracker.store.engine import Database
from tracker.store.fleet import unit_record
from tracker.store.results import latest_assessment
from tracker.thermal import simulate


@dataclass(frozen=True, slots=True)
class UnitTrace:
    """Arrays of shape (n_interval,); NaN marks what is not known."""

    interval_start_s: NDArray[np.int64]  #: [s since 1970, UTC]
    step_h: float
    load_kva: NDArray[np.float64]
    air_temp_c: NDArray[np.float64]
    top_oil_c: NDArray[np.float64]  #: at the end of the interval
    hot_spot_c: NDArray[np.float64]  #: at the end of the interval
    aging_factor: NDArray[np.float64]  #: mean over the interval
    counted: NDArray[np.bool_]  #: whether the interval counts in the unit's figures


def unit_trace(
    database: Database,
    unit_id: str,
    *,
    starts_at: dt.datetime | None = None,
    ends_at: dt.datetime | None = None,
    settings: AssessmentSettings | None = None,
) -> UnitTrace:
    """Compute a unit's temperatures.

    The run begins where the newest assessment began, or with the first data, so that it gives the
    figures of the ranking; `starts_at` and `ends_at` cut out the part to show.

    Parameters
    ----------
    settings : AssessmentSettings, optional
        Those of the newest assessment unless said.

    Raises
    ------
    InputError
        If the unit is not known, or no load is held in the period.
    """
    with database.reading() as connection:
        record = unit_record(connection, unit_id)
        latest = latest_assessment(connection)
        run_from = latest.starts_at if latest else None
        if run_from and starts_at and starts_at < run_from:
            run_from = None
        if settings is None:
            settings = AssessmentSettings(**latest.settings) if latest else AssessmentSettings()
        period = chosen_period(connection, run_from, ends_at)
        plan = fleet_plan(connection, period, {record.unit_id})
        (batch,) = profiles(connection, plan)
    air = batch.air_temp_c[batch.station_index].astype(np.float64)
    trace = simulate(
        batch.load_kva,
        air,
        batch.parameters,
        batch.step_min / 60,
        time_constant=settings.time_constant,
    )
    start_s = batch.start_s + 60 * batch.step_min * np.arange(air.shape[1], dtype=np.int64)
    shown = start_s >= (int(starts_at.timestamp()) if starts_at else 0)
    if not shown.any():
        raise InputError(
            f"unit {unit_id}: no load is held from {starts_at} on; the data end at {period.ends_at}."
        )
    return UnitTrace(
        start_s[shown],
        batch.step_min / 60,
        batch.load_kva[0, shown].astype(np.float64),
        air[0, shown],
        trace.top_oil_c[0, shown],
        trace.hot_spot_c[0, shown],
        trace.aging_factor[0, shown],
        trace.counted[0, shown],
    )
