"""One unit, interval by interval: computed when somebody looks, never stored."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.assessment.profiles import (
    Period,
    chosen_period,
    fleet_plan,
    load_flags,
    profiles,
)
from tracker.errors import InputError
from tracker.settings import AssessmentSettings
from tracker.store.engine import Database
from tracker.store.fleet import unit_record
from tracker.store.measured import ALL_MEASURED
from tracker.store.results import AssessmentRow, latest_assessment
from tracker.thermal.kernel import trace_fleet


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
    load_flags: NDArray[np.uint8]  #: what is known of the load beyond its size, see `Quality`
    measured_share: NDArray[np.float64]  #: of the load, 0 to 1
    air_filled: NDArray[np.bool_]  #: whether a straight line bridges the air temperature


def unit_trace(
    database: Database,
    unit_id: str,
    *,
    starts_at: dt.datetime | None = None,
    ends_at: dt.datetime | None = None,
    settings: AssessmentSettings | None = None,
) -> UnitTrace:
    """Compute a unit's temperatures.

    The run covers the period of the newest assessment, or all data when there is none, so that it
    gives the figures of the ranking.

    Parameters
    ----------
    starts_at, ends_at : datetime, optional
        The part of the run to show; a part outside the assessment's period makes it a run over all
        data on that side.
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
        if settings is None:
            settings = AssessmentSettings(**latest.settings) if latest else AssessmentSettings()
        period = _run_period(connection, latest, starts_at, ends_at)
        plan = fleet_plan(connection, period, {record.unit_id})
        (batch,) = profiles(connection, plan)
        flags = load_flags(connection, plan, batch.step_min)[0]
    trace = trace_fleet(
        batch.load_kva,
        batch.air_temp_c,
        batch.station_index,
        batch.parameters,
        batch.step_min / 60,
        time_constant=settings.time_constant,
    )
    air = batch.air_temp_c[batch.station_index].astype(np.float64)
    measured = batch.measured_share[0] if len(batch.measured_rows) else np.uint8(ALL_MEASURED)
    share = np.broadcast_to(measured / ALL_MEASURED, air.shape[1:])
    start_s = batch.start_s + 60 * batch.step_min * np.arange(air.shape[1], dtype=np.int64)
    shown = np.ones(len(start_s), dtype=np.bool_)
    if starts_at is not None:
        shown &= start_s >= starts_at.timestamp()
    if ends_at is not None:
        shown &= start_s < ends_at.timestamp()
    if not shown.any():
        raise InputError(
            f"no load is held in the period asked for; the store holds {period.starts_at:%Y-%m-%d %H:%M} "
            f"to {period.ends_at:%Y-%m-%d %H:%M} UTC."
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
        flags[shown],
        share[shown],
        batch.air_filled[batch.station_index[0], shown],
    )


def _run_period(
    connection: Connection,
    latest: AssessmentRow | None,
    starts_at: dt.datetime | None,
    ends_at: dt.datetime | None,
) -> Period:
    """Return the assessment's period, or all data on a side where more is asked for."""
    if latest is None:
        return chosen_period(connection, None, None)
    early = starts_at is not None and starts_at < latest.starts_at
    late = ends_at is not None and ends_at > latest.ends_at
    if early or late:
        return chosen_period(
            connection, None if early else latest.starts_at, None if late else latest.ends_at
        )
    return Period.between(latest.starts_at, latest.ends_at)
