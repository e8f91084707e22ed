"""Active, reactive and apparent power."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray


def reactive_per_active(power_factor: ArrayLike) -> NDArray[np.float64]:
    """Return the reactive power that stands beside each unit of active power.

    Parameters
    ----------
    power_factor : array_like, shape (...)
        Above 0, up to 1. [1]

    Returns
    -------
    ndarray of float64, shape (...)
        tan(arccos(power factor)). [kvar/kW]

    Examples
    --------
    >>> reactive_per_active([1.0, 0.8])
    array([0.  , 0.75])
    """
    cosine = np.asarray(power_factor, dtype=np.float64)
    return np.sqrt(1.0 - cosine**2) / cosine


def kva_per_amp(volts: ArrayLike, phases: ArrayLike) -> NDArray[np.float64]:
    """Return the apparent power that each ampere of line current carries.

    Parameters
    ----------
    volts : array_like, shape (...)
        Rated voltage of the side that the current was read on, line to line with three phases. [V]
    phases : array_like, shape (...)
        1 or 3.

    Returns
    -------
    ndarray of float64, shape (...)
        U/1000 with one phase, sqrt(3)·U/1000 with three. [kVA/A]

    Examples
    --------
    >>> kva_per_amp([240.0, 480.0], [1, 3]).round(4)
    array([0.24  , 0.8314])
    """
    factor = np.sqrt(np.asarray(phases, dtype=np.float64))
    return np.asarray(factor * np.asarray(volts, dtype=np.float64) / 1000.0)


def turns_ratio(hv_volts: ArrayLike, lv_volts: ArrayLike) -> NDArray[np.float64]:
    """Return how many amperes of the low-voltage side stand for one of the high-voltage side.

    The ideal ratio: the power is the same on both sides, so current falls as voltage rises.

    Parameters
    ----------
    hv_volts, lv_volts : array_like, shape (...)
        Rated voltages of the two sides. [V]

    Returns
    -------
    ndarray of float64, shape (...)
        [A/A]

    Examples
    --------
    >>> turns_ratio(7200.0, 240.0)
    array(30.)
    """
    return np.asarray(np.asarray(hv_volts, dtype=np.float64) / np.asarray(lv_volts))
