"""How much of a unit's energy was measured: the figure that says how far to trust the others."""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

from tracker.settings import LONGEST_CARRIED_HOLE_H, WARM_UP_H
from tracker.store.blocks import Float32Array
from tracker.store.measured import ALL_MEASURED
from tracker.thermal.c57_91 import intervals_in


def measured_energy_share(
    load_kva: Float32Array,
    air_temp_c: Float32Array,
    station_index: NDArray[np.int64],
    rows: NDArray[np.intp],
    measured_share: NDArray[np.uint8],
    step_h: float,
) -> NDArray[np.float64]:
    """Return which share of the energy of the counted intervals was measured.

    An interval counts where the thermal model counts it: load and air temperature are known, and
    the thermal state is warmed up.

    Parameters
    ----------
    load_kva : float32, shape (n_unit, n_time)
        NaN marks a gap. [kVA]
    air_temp_c : float32, shape (n_station, n_time)
        Likewise. [°C]
    station_index : int64, shape (n_unit,)
        Row of `air_temp_c` that holds for each unit.
    rows : shape (n_row,)
        The units to look at.
    measured_share : uint8, shape (n_row, n_time)
        Of each of their loads. [1/200]
    step_h : float
        Length of every interval. [h]

    Returns
    -------
    share : float64, shape (n_row,)
        0 to 1; 1 where no energy is counted, as there is none to doubt.

    Examples
    --------
    >>> load_kva = np.full((1, 48), 10.0, dtype=np.float32)
    >>> half = np.full((1, 48), 100, dtype=np.uint8)
    >>> half[0, :36] = 200
    >>> measured_energy_share(load_kva, load_kva, np.array([0]), np.array([0]), half, 1.0)
    array([0.75])
    """
    day = intervals_in(WARM_UP_H, step_h)
    longest_hole = intervals_in(LONGEST_CARRIED_HOLE_H, step_h)
    energy, measured = _energies(
        load_kva, air_temp_c, station_index, rows, measured_share, day, longest_hole
    )
    share: NDArray[np.float64] = np.ones_like(energy)
    np.divide(measured, energy, out=share, where=energy > 0.0)
    return share


@njit(cache=True, nogil=True)
def _energies(  # type: ignore[no-untyped-def]
    load_kva, air_temp_c, station_index, rows, measured_share, day, longest_hole
):
    """Sum energy and measured energy over what counts, as `c57_91._Counter` decides it."""
    n_row, n_time = measured_share.shape
    energy, measured = np.zeros(n_row), np.zeros(n_row)
    for row in range(n_row):
        unit = rows[row]
        station = station_index[unit]
        begun = False
        hole, warm_up_left = 0, day
        for t in range(n_time):
            load_known = np.isfinite(load_kva[unit, t])
            begun = begun or load_known
            if not begun:
                continue
            whole = load_known and np.isfinite(air_temp_c[station, t])
            if whole and hole > longest_hole:
                warm_up_left = day
            if whole and warm_up_left == 0:
                energy[row] += load_kva[unit, t]
                measured[row] += load_kva[unit, t] * (measured_share[row, t] / ALL_MEASURED)
            hole = 0 if whole else hole + 1
            warm_up_left = max(warm_up_left - 1, 0)
    return energy, measured
