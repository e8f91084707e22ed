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
    if not _rises(series, stamp_s, order):
        order = np.lexsort((stamp_s, series))
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
def _rises(series, stamp_s, order):  # type: ignore[no-untyped-def]
    """Say whether the stamps of every series come in order of time, as they do in most files."""
    for at in range(1, len(order)):
        i, before = order[at], order[at - 1]
        if series[i] == series[before] and stamp_s[i] < stamp_s[before]:
            return False
    return True


@njit(cache=True, nogil=True)
def _intervals(series, stamp_s, order, n_series):  # type: ignore[no-untyped-def]
    """Walk each series from stamp to stamp; the arrays of counts are those of one series."""
    step_min = np.zeros(n_series, np.int32)
    phase_min = np.full(n_series, -1, np.int32)
    steps = np.zeros(61, np.int64)
    phases = np.zeros(60, np.int64)
    for at in range(len(order)):
        i = order[at]
        s = series[i]
        if at == 0 or series[order[at - 1]] != s:
            steps[:] = 0
            phases[:] = 0
        else:
            distance = stamp_s[i] - stamp_s[order[at - 1]]
            if 0 < distance <= 3600 and distance % 60 == 0:
                steps[distance // 60] += 1
        phases[(stamp_s[i] // 60) % 60] += 1
        if at == len(order) - 1 or series[order[at + 1]] != s:
            commonest = 0
            for length in INTERVALS_MIN:
                if steps[length] > commonest:
                    commonest = steps[length]
                    step_min[s] = length
            phase_min[s] = np.argmax(phases)
    return step_min, phase_min
