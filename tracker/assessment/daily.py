"""A trace by the day: how fast a unit aged, and what that used of its life."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from tracker.thermal import equivalent_aging_factor, loss_of_life_pct

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

DAY_S = 86_400


def aging_by_day(
    interval_start_s: IntArray, aging_factor: FloatArray, counted: BoolArray
) -> tuple[IntArray, FloatArray]:
    """Return the equivalent aging factor F_EQA of each day in UTC, over its counted intervals.

    Parameters
    ----------
    interval_start_s : int64, shape (n_time,)
        Starts of intervals of one length, in order. [s since 1970, UTC]
    aging_factor : float64, shape (n_time,)
        Mean F_AA of each interval; NaN in gaps. [1]
    counted : bool, shape (n_time,)
        Whether an interval counts.

    Returns
    -------
    day_start_s : int64, shape (n_day,)
        Every day from the first interval's to the last one's. [s since 1970, UTC]
    f_eqa : float64, shape (n_day,)
        NaN for a day without a counted interval. [1]

    Examples
    --------
    >>> half_days = np.arange(4) * 43_200
    >>> aging_by_day(half_days, np.array([9.0, 2.0, 1.0, 3.0]), half_days > 0)
    (array([    0, 86400]), array([2., 2.]))
    """
    if not interval_start_s.size:
        return np.empty(0, dtype=np.int64), np.empty(0)
    day = interval_start_s // DAY_S
    number = day - day[0]
    aging = np.bincount(number, weights=np.where(counted, aging_factor, 0.0))
    intervals = np.bincount(number, weights=counted)
    day_start_s = (day[0] + np.arange(len(aging))) * DAY_S
    return day_start_s, equivalent_aging_factor(aging, intervals)


def life_used_by_day(
    interval_start_s: IntArray,
    step_h: float,
    aging_factor: FloatArray,
    counted: BoolArray,
    life_h: float,
) -> tuple[IntArray, FloatArray]:
    """Return the share of insulation life used since the start, at the end of each day in UTC.

    Parameters
    ----------
    interval_start_s, aging_factor, counted
        As of `aging_by_day`.
    step_h : float
        Length of every interval. [h]
    life_h : float
        Normal insulation life. [h]

    Returns
    -------
    day_end_s : int64, shape (n_day,)
        [s since 1970, UTC]
    life_used_pct : float64, shape (n_day,)
        Never falls; stands still over gaps. [%]

    Examples
    --------
    >>> half_days = np.arange(4) * 43_200
    >>> life_used_by_day(half_days, 12.0, np.ones(4), half_days >= 0, 4_800.0)
    (array([ 86400, 172800]), array([0.5, 1. ]))
    """
    if not interval_start_s.size:
        return np.empty(0, dtype=np.int64), np.empty(0)
    day = interval_start_s // DAY_S
    aging_h = step_h * np.bincount(day - day[0], weights=np.where(counted, aging_factor, 0.0))
    day_end_s = (day[0] + 1 + np.arange(len(aging_h))) * DAY_S
    return day_end_s, np.asarray(loss_of_life_pct(np.cumsum(aging_h), life_h))
