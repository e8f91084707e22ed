"""How long the interval of each series is, found from its stamps."""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

#: Interval lengths that meters and weather stations use [min].
INTERVALS_MIN = (5, 10, 15, 20, 30, 60)


def found_intervals(
    series: NDArray[np.int32], stamp_s: NDArray[np.int64], n_series: int
) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
    """Find the interval of each series: the commonest distance between neighbouring stamps.

    Parameters
    ----------
    series : int32, shape (n_reading,)
        Which series each stamp is of, from 0 to `n_series` - 1.
    stamp_s : int64, shape (n_reading,)
        Stamps [s since 1970, UTC], in any order.

    Returns
    -------
    step_min : int32, shape (n_series,)
        One of `INTERVALS_MIN`; 0 where no two neighbours tell.
    phase_min : int32, shape (n_series,)
        Minute of the hour on which most stamps fall; -1 of a series without any.

    Examples
    --------
    >>> steps, phases = found_intervals(np.zeros(3, np.int32), np.array([0, 900, 1800]), 1)
    >>> int(steps[0]), int(phases[0])
    (15, 0)
    """
    order = _by_series(series, n_series)
    step_min, phase_min = _intervals(series, stamp_s, order, n_series)
    return step_min, phase_min


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
def _intervals(series, stamp_s, order, n_series):  # type: ignore[no-untyped-def]
    lengths = np.array(INTERVALS_MIN, np.int32)
    step_min = np.zeros(n_series, np.int32)
    phase_min = np.full(n_series, -1, np.int32)
    counts = np.zeros(len(lengths), np.int64)
    phases = np.zeros(60, np.int64)
    at = 0
    while at < len(order):
        s = series[order[at]]
        stop = at + 1
        rising = True
        while stop < len(order) and series[order[stop]] == s:
            rising = rising and stamp_s[order[stop]] >= stamp_s[order[stop - 1]]
            stop += 1
        own = np.empty(stop - at, np.int64)
        for k in range(at, stop):
            own[k - at] = stamp_s[order[k]]
        if not rising:
            own.sort()
        counts[:] = 0
        phases[:] = 0
        for k in range(len(own)):
            phases[(own[k] // 60) % 60] += 1
            if k:
                distance = own[k] - own[k - 1]
                for j in range(len(lengths)):
                    if distance == 60 * lengths[j]:
                        counts[j] += 1
        best = np.argmax(counts)
        if counts[best] > 0:
            step_min[s] = lengths[best]
        phase_min[s] = np.argmax(phases)
        at = stop
    return step_min, phase_min
