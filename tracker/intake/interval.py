"""How long the interval of each reading is, found from the stamps around it.

A meter's interval is the commonest distance between its neighbouring stamps. It may change midway,
when the meter is set anew: an even run of another distance says so. A single other distance is a
gap.
"""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

#: Interval lengths that meters and weather stations use [min].
INTERVALS_MIN = (5, 10, 15, 20, 30, 60)

#: Even distances in a row that make an interval of their own.
EVEN_RUN = 4


def in_time_order(
    series: NDArray[np.int32], moment_s: NDArray[np.int64], n_series: int
) -> NDArray[np.int64]:
    """Return the order of readings series by series and, within each, by time.

    Readings of one moment stay in the order they came in. Most files run forward in time, so sorting
    is the exception.

    Parameters
    ----------
    series : int32, shape (n_reading,)
        Which series each reading is of, from 0 to `n_series` - 1.
    moment_s : int64, shape (n_reading,)

    Examples
    --------
    >>> in_time_order(np.array([1, 0, 1], np.int32), np.array([60, 0, 0]), 2).tolist()
    [1, 2, 0]
    """
    if _is_in_order(series, moment_s, n_series):
        return np.arange(len(series))
    order: NDArray[np.int64] = _by_series(series, n_series)
    return order if _rises(series, moment_s, order) else np.lexsort((moment_s, series))


def found_intervals(
    series: NDArray[np.int32],
    stamp_s: NDArray[np.int64],
    order: NDArray[np.int64],
    n_series: int,
    *,
    stamps_at_end: bool = False,
) -> tuple[NDArray[np.int16], NDArray[np.int32], NDArray[np.int32]]:
    """Find the interval of each reading and the minutes on which each series' intervals begin.

    Parameters
    ----------
    series : int32, shape (n_reading,)
        Which series each stamp is of, from 0 to `n_series` - 1.
    stamp_s : int64, shape (n_reading,)
        Stamps [s since 1970, UTC], in any order.
    order : int64, shape (n_reading,)
        As `in_time_order` gives it.
    stamps_at_end : bool
        Whether a reading's interval lies before its stamp.

    Returns
    -------
    step_min : int16, shape (n_reading,)
        One of `INTERVALS_MIN`; 0 in series in which no two neighbours tell.
    last_min : int32, shape (n_series,)
        The interval of the latest reading of each series; 0 where nothing tells.
    phase_min : int32, shape (n_series,)
        Minute of the hour on which most stamps fall; -1 of a series without any.

    Examples
    --------
    >>> series, stamp_s = np.zeros(3, np.int32), np.array([0, 900, 1800])
    >>> steps, _, phases = found_intervals(series, stamp_s, np.arange(3), 1)
    >>> steps.tolist(), int(phases[0])
    ([15, 15, 15], 0)
    """
    if stamps_at_end:  # seen backwards in time, an interval follows its stamp
        order = order[::-1].copy()
    step_min, last_min, phase_min = _intervals(series, stamp_s, order, n_series, stamps_at_end)
    return step_min, last_min, phase_min


@njit(cache=True, nogil=True)
def _is_in_order(series, moment_s, n_series):  # type: ignore[no-untyped-def]
    """Say whether each series is one stretch of readings that run forward in time."""
    seen = np.zeros(n_series, np.bool_)
    for i in range(len(series)):
        if i > 0 and series[i] == series[i - 1]:
            if moment_s[i] < moment_s[i - 1]:
                return False
        elif seen[series[i]]:
            return False
        else:
            seen[series[i]] = True
    return True


@njit(cache=True, nogil=True)
def _by_series(series, n_series):  # type: ignore[no-untyped-def]
    starts = np.zeros(n_series + 1, np.int64)
    for i in range(len(series)):
        starts[series[i] + 1] += 1
    for s in range(n_series):
        starts[s + 1] += starts[s]
    order = np.empty(len(series), np.int64)
    for i in range(len(series)):
        order[starts[series[i]]] = i
        starts[series[i]] += 1
    return order


@njit(cache=True, nogil=True)
def _rises(series, stamp_s, order):  # type: ignore[no-untyped-def]
    """Say whether the stamps of every series come in order of time, as they do in most files."""
    for at in range(1, len(order)):
        i, before = order[at], order[at - 1]
        if series[i] == series[before] and stamp_s[i] < stamp_s[before]:
            return False
    return True


@njit(cache=True, nogil=True)
def _intervals(series, stamp_s, order, n_series, backwards):  # type: ignore[no-untyped-def]
    """Walk each series from stamp to stamp, a stretch of `order` each."""
    step_min = np.zeros(len(order), np.int16)
    last_min = np.zeros(n_series, np.int32)
    phase_min = np.full(n_series, -1, np.int32)
    following = np.zeros(len(order), np.int16)
    counts = np.zeros(61, np.int64)
    phases = np.zeros(60, np.int64)
    first = 0
    while first < len(order):
        s = series[order[first]]
        counts[:] = 0
        phases[:] = 0
        after = first
        while after < len(order) and series[order[after]] == s:
            phases[(stamp_s[order[after]] // 60) % 60] += 1
            if after > first:
                minutes = abs(stamp_s[order[after]] - stamp_s[order[after - 1]]) // 60
                following[after - 1] = minutes if minutes <= 60 else 61
                counts[min(minutes, 60)] += minutes <= 60
            after += 1
        following[after - 1] = 61
        phase_min[s] = np.argmax(phases)
        commonest, most = 0, 0
        for length in INTERVALS_MIN:
            if counts[length] > most:
                commonest, most = length, counts[length]
        _give_steps(step_min, following, order, first, after, commonest)
        last_min[s] = step_min[order[first if backwards else after - 1]]
        first = after
    return step_min, last_min, phase_min


@njit(cache=True, nogil=True)
def _give_steps(step_min, following, order, first, after, commonest):  # type: ignore[no-untyped-def]
    """Give the readings of one series their intervals.

    A reading's interval is the distance to the next stamp where that is the commonest, or stands in
    an even run; elsewhere there is a gap, and the interval is that of the reading before.
    """
    step = commonest
    at = first
    while at < after:
        distance = following[at]
        run = at + 1
        while run < after and (following[run] == distance or following[run] == 0):
            run += 1
        even = distance == commonest or (run - at >= EVEN_RUN and distance in INTERVALS_MIN)
        if even:
            step = distance
        for place in range(at, run):
            step_min[order[place]] = step
        at = run
