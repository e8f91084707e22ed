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
