"""An assessment: the thermal model over the fleet, its figures stored."""

from __future__ import annotations

import datetime as dt
from collections import deque
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tracker.assessment.coverage import measured_energy_share
from tracker.assessment.profiles import (
    Fingerprint,
    Period,
    Profiles,
    chosen_period,
    fleet_plan,
    packed_profiles,
)
from tracker.collector import seldom_collected
from tracker.settings import WARM_UP_H, AssessmentSettings
from tracker.store import results
from tracker.store.engine import Database
from tracker.thermal import FleetFigures, equivalent_aging_factor, loss_of_life_pct
from tracker.thermal.kernel import assess_fleet
from tracker.version import __version__


@dataclass(frozen=True, slots=True)
class AssessmentSummary:
    """What an assessment found, in a few numbers."""

    key: int
    period: Period
    settings: AssessmentSettings
    units: int = 0
    units_without_figures: int = 0
    units_over_rating: int = 0
    units_over_hot_spot_limit: int = 0
    units_aging_faster_than_normal: int = 0

    def with_rows(self, rows: Sequence[Mapping[str, Any]]) -> AssessmentSummary:
        """Return the summary with the results of more units in it."""
        aging = self.units_aging_faster_than_normal
        return replace(
            self,
            units=self.units + len(rows),
            units_without_figures=self.units_without_figures
            + sum(row["peak_hot_spot_c"] is None for row in rows),
            units_over_rating=self.units_over_rating
            + sum(row["hours_over_rating"] > 0 for row in rows),
            units_over_hot_spot_limit=self.units_over_hot_spot_limit
            + sum(row["hours_over_hot_spot_limit"] > 0 for row in rows),
            units_aging_faster_than_normal=aging
            + sum((row["aging_factor"] or 0) > 1 for row in rows),
        )

    def as_json(self) -> dict[str, Any]:
        """Return it for scripts."""
        return {
            "assessment": self.key,
            "starts_at": self.period.starts_at,
            "ends_at": self.period.ends_at,
            "settings": asdict(self.settings),
            "units": self.units,
            "units_without_figures": self.units_without_figures,
            "units_over_rating": self.units_over_rating,
            "units_over_hot_spot_limit": self.units_over_hot_spot_limit,
            "units_aging_faster_than_normal": self.units_aging_faster_than_normal,
        }

    def __str__(self) -> str:
        return (
            f"{self.units:,} units from {self.period.starts_at:%Y-%m-%d %H:%M} to "
            f"{self.period.ends_at:%Y-%m-%d %H:%M} UTC: "
            f"{self.units_over_hot_spot_limit:,} over {self.settings.hot_spot_limit_c:g} °C, "
            f"{self.units_aging_faster_than_normal:,} aging faster than normal, "
            f"{self.units_over_rating:,} over their rating, "
            f"{self.units_without_figures:,} without figures"
        )


@seldom_collected()
def assess(
    database: Database,
    settings: AssessmentSettings | None = None,
    *,
    starts_at: dt.datetime | None = None,
    ends_at: dt.datetime | None = None,
    on_progress: Callable[[float], None] | None = None,
) -> AssessmentSummary:
    """Run the thermal model over every unit and store the figures.

    Parameters
    ----------
    starts_at, ends_at : datetime, optional
        The part of the data to assess; all of it unless said.
    on_progress : callable, optional
        Told the share of units done, 0 to 1.

    Raises
    ------
    InputError
        If no load is held in the period.
    """
    settings = settings or AssessmentSettings()
    with database.reading() as connection:
        period = chosen_period(connection, starts_at, ends_at)
        plan = fleet_plan(connection, period)
        with database.writing() as written:
            key = results.begin_assessment(
                written,
                program_version=__version__,
                settings=asdict(settings),
                starts_at=period.starts_at,
                ends_at=period.ends_at,
            )
        summary = AssessmentSummary(key, period, settings)
        fingerprint = Fingerprint()
        for batch, figures in _assessed(packed_profiles(connection, plan, fingerprint), settings):
            rows = list(_rows(key, batch, figures, settings))
            with database.writing() as written:
                results.add_results(written, rows)
            summary = summary.with_rows(rows)
            if on_progress:
                on_progress(summary.units / len(plan.units))
    with database.writing() as written:
        results.finish_assessment(written, key, str(fingerprint))
    return summary


Assessed = tuple[Profiles, FleetFigures]

#: Digits that coverage is kept to [%]: 160/200 of every value is 80 %, whatever a sum makes of it.
COVERAGE_DECIMALS = 9

#: Batches under way at a time: one read, one unpacked, one in the kernel.
BATCHES_UNDER_WAY = 3


def _assessed(
    batches: Iterable[Callable[[], Profiles]], settings: AssessmentSettings
) -> Iterator[Assessed]:
    """Yield each batch with its figures, while the next is unpacked and the one after it read."""
    with ThreadPoolExecutor(1) as unpacking, ThreadPoolExecutor(1) as stepping:
        waiting: deque[Future[Assessed]] = deque()
        for unpacked in batches:
            batch = unpacking.submit(unpacked)
            waiting.append(stepping.submit(_with_figures, batch, settings))
            if len(waiting) == BATCHES_UNDER_WAY:
                yield waiting.popleft().result()
        while waiting:
            yield waiting.popleft().result()


def _with_figures(unpacked: Future[Profiles], settings: AssessmentSettings) -> Assessed:
    batch = unpacked.result()
    figures = assess_fleet(
        batch.load_kva,
        batch.air_temp_c,
        batch.station_index,
        batch.parameters,
        batch.step_min / 60,
        hot_spot_limit_c=settings.hot_spot_limit_c,
        time_constant=settings.time_constant,
    )
    return batch, figures


def _rows(
    key: int, batch: Profiles, figures: FleetFigures, settings: AssessmentSettings
) -> Iterator[dict[str, Any]]:
    """Turn figures into rows of the results table."""
    counted_h = figures.counted_hours
    known = counted_h > 0
    step_s = 60 * batch.step_min
    columns: dict[str, Any] = {
        "peak_load_pct": 100.0 * figures.peak_load_pu,
        "peak_hot_spot_c": figures.peak_hot_spot_c,
        "peak_top_oil_c": figures.peak_top_oil_c,
        "hours_over_rating": figures.hours_over_rating,
        "hours_over_hot_spot_limit": figures.hours_over_hot_spot_limit,
        "aging_hours": figures.aging_hours,
        "aging_factor": equivalent_aging_factor(
            figures.aging_hours, np.where(known, counted_h, np.nan)
        ),
        "life_used_pct": np.where(
            known, loss_of_life_pct(figures.aging_hours, settings.life_h), np.nan
        ),
        "counted_hours": counted_h,
        "coverage_pct": _coverage_pct(batch, counted_h),
        "end_top_oil_rise_k": figures.state.top_oil_rise_k,
        "end_hot_spot_gradient_k": figures.state.hot_spot_gradient_k,
        "end_last_load_pu": figures.state.last_load_pu,
        "end_hole_h": figures.state.hole_h,
        "end_warm_up_left_h": figures.state.warm_up_left_h,
    }
    lists = [_or_none(values) for values in columns.values()]
    for unit_key, site_key, index, *values in zip(
        batch.unit_keys, batch.site_keys, figures.peak_hot_spot_index.tolist(), *lists, strict=True
    ):
        peak_at = batch.start_s + index * step_s
        yield {
            "assessment_key": key,
            "unit_key": unit_key,
            "site_key": site_key,
            "peak_hot_spot_at": dt.datetime.fromtimestamp(peak_at, dt.UTC) if index >= 0 else None,
            **dict(zip(columns, values, strict=True)),
        }


def _coverage_pct(batch: Profiles, counted_h: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the measured share of each unit's energy over the hours it stood somewhere [%].

    What is missing altogether is taken for as large as what counts.
    """
    expected_h = np.maximum(batch.expected_h - WARM_UP_H, 0.0)
    covered = np.divide(counted_h, expected_h, out=np.zeros_like(counted_h), where=expected_h > 0)
    rows = batch.measured_rows
    if len(rows):
        covered[rows] *= measured_energy_share(
            batch.load_kva,
            batch.air_temp_c,
            batch.station_index,
            rows,
            batch.measured_share,
            batch.step_min / 60,
        )
    return np.round(100.0 * covered, COVERAGE_DECIMALS)


def _or_none(values: Any) -> list[float | None]:
    return [None if value != value else value for value in np.asarray(values).tolist()]  # noqa: PLR0124 - NaN
