"""The clock of the invented district: intervals, and the local time of each."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import pandas as pd
from numpy.typing import NDArray

FloatArray = NDArray[np.float32]

TIME_ZONE = "America/Chicago"
LATITUDE_DEG, LONGITUDE_DEG = 38.42, -99.71
FIRST_DAY, LAST_DAY = dt.date(2025, 1, 1), dt.date(2028, 12, 31)


@dataclass(frozen=True)
class Clock:
    """The intervals from the first day of the world to `last_day`, and the local time of each."""

    first_day: dt.date  #: first day written
    last_day: dt.date  #: last day written
    step_minutes: int

    @cached_property
    def _local(self) -> pd.DatetimeIndex:
        stamps = pd.date_range(
            pd.Timestamp(FIRST_DAY, tz=TIME_ZONE),
            pd.Timestamp(self.last_day + dt.timedelta(days=1), tz=TIME_ZONE),
            freq=f"{self.step_minutes}min",
            inclusive="left",
        )
        return pd.DatetimeIndex(stamps)

    @property
    def n_step(self) -> int:
        """Number of intervals since the first day of the world."""
        return len(self._local)

    @property
    def step_h(self) -> float:
        """Length of an interval [h]."""
        return self.step_minutes / 60

    @cached_property
    def stamps_utc(self) -> NDArray[np.datetime64]:
        """Starts of the intervals, UTC, shape (n_step,)."""
        return self._local.tz_convert("UTC").tz_localize(None).to_numpy().astype("M8[m]")

    @cached_property
    def hour(self) -> NDArray[np.intp]:
        """Local hour of the day, 0 to 23."""
        return np.asarray(self._local.hour, dtype=np.intp)

    @cached_property
    def solar_hour(self) -> FloatArray:
        """Hour of the day by the sun at the middle of the interval, 0 to 24."""
        elapsed_h = (self.stamps_utc - self.stamps_utc[0].astype("M8[Y]")) / np.timedelta64(60, "m")
        return np.asarray((elapsed_h + self.step_h / 2 + LONGITUDE_DEG / 15) % 24, dtype=np.float32)

    @cached_property
    def weekend(self) -> NDArray[np.bool_]:
        """Saturday or Sunday."""
        return np.asarray(self._local.day_of_week >= 5)

    @cached_property
    def sunday(self) -> NDArray[np.bool_]:
        """Sunday."""
        return np.asarray(self._local.day_of_week == 6)

    @cached_property
    def day_of_year(self) -> NDArray[np.intp]:
        """Local day of the year, from 1."""
        return np.asarray(self._local.day_of_year, dtype=np.intp)

    @cached_property
    def month(self) -> NDArray[np.str_]:
        """Local month, like `2025-07`."""
        return np.asarray(np.datetime_as_string(self._local.tz_localize(None).to_numpy(), unit="M"))

    @cached_property
    def day(self) -> NDArray[np.intp]:
        """Local days since the first day of the world."""
        days = self._local.tz_localize(None).normalize() - pd.Timestamp(FIRST_DAY)
        return np.asarray(days.days, dtype=np.intp)

    @property
    def n_day(self) -> int:
        """Number of local days since the first day of the world."""
        return (self.last_day - FIRST_DAY).days + 1

    @cached_property
    def first_step_of_day(self) -> NDArray[np.intp]:
        """Index of the first interval of each local day, shape (n_day,)."""
        return np.searchsorted(self.day, np.arange(self.n_day))

    def step_at(self, day: dt.date, hour: float = 0.0) -> int:
        """Index of the interval `hour` hours after local midnight of `day`; may lie outside."""
        days = (day - FIRST_DAY).days
        if days < 0:
            return 0
        if days >= self.n_day:
            return self.n_step
        return int(self.first_step_of_day[days]) + round(hour / self.step_h)

    @property
    def window(self) -> slice:
        """The intervals that are written."""
        return slice(self.step_at(self.first_day), self.n_step)
