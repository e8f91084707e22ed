"""Thermal capacity of a unit from its weights and oil, and the time constant that follows from it.

For units whose test sheet gives weights and losses but no time constant. IEEE C57.91, clause 7, for
natural oil flow and fans; the guide's figures are held from memory.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["rated_time_constant_h", "thermal_capacity_wh_per_k"]

FloatArray = NDArray[np.float64]

KG_PER_LB = 0.45359237
L_PER_US_GALLON = 3.785411784

#: What each part stores [Wh/(K·kg)] and [Wh/(K·L)]; the guide gives 0.06 and 0.04 Wh/(K·lb) and
#: 1.33 Wh/(K·gal).
CORE_AND_COILS_WH_PER_K_KG = 0.06 / KG_PER_LB
TANK_WH_PER_K_KG = 0.04 / KG_PER_LB
OIL_WH_PER_K_L = 1.33 / L_PER_US_GALLON


def thermal_capacity_wh_per_k(
    core_coil_kg: ArrayLike, tank_kg: ArrayLike, oil_l: ArrayLike
) -> FloatArray:
    r"""Heat that warms a unit by one kelvin.

    Parameters
    ----------
    core_coil_kg : array_like, shape (...)
        Weight of core and coils. [kg]
    tank_kg : array_like, broadcastable
        Weight of tank and fittings. [kg]
    oil_l : array_like, broadcastable
        Volume of oil. [L]

    Returns
    -------
    ndarray of float64, shape (...)
        Thermal capacity. [Wh/K]

    Notes
    -----
    .. math:: C = 0.06\,\mathrm{lb_{core,coils}} + 0.04\,\mathrm{lb_{tank}}
              + 1.33\,\mathrm{gal_{oil}}

    References
    ----------
    .. [1] IEEE C57.91-2011, clause 7, thermal capacity, natural oil flow and fans.

    Examples
    --------
    A 25 kVA pole unit:

    >>> thermal_capacity_wh_per_k(90.0, 40.0, 45.0).round(1)
    np.float64(31.2)
    """
    core_coil, tank, oil = (np.asarray(v, dtype=np.float64) for v in (core_coil_kg, tank_kg, oil_l))
    capacity: FloatArray = (
        CORE_AND_COILS_WH_PER_K_KG * core_coil + TANK_WH_PER_K_KG * tank + OIL_WH_PER_K_L * oil
    )
    return capacity


def rated_time_constant_h(
    capacity_wh_per_k: ArrayLike, top_oil_rise_k: ArrayLike, total_loss_w: ArrayLike
) -> FloatArray:
    r"""Top-oil time constant at rated load.

    Parameters
    ----------
    capacity_wh_per_k : array_like, shape (...)
        Thermal capacity, see `thermal_capacity_wh_per_k`. [Wh/K]
    top_oil_rise_k : array_like, broadcastable
        Top oil over ambient at rated load. [K]
    total_loss_w : array_like, broadcastable
        No-load and load loss at rated load, above 0. [W]

    Returns
    -------
    ndarray of float64, shape (...)
        Time constant at rated load. [h]

    Notes
    -----
    .. math:: \tau_R = C \, \Delta\Theta_{TO,R} / P_{T,R}

    References
    ----------
    .. [1] IEEE C57.91-2011, clause 7, oil thermal time constant at rated load.

    Examples
    --------
    >>> rated_time_constant_h(31.2, 53.0, 65.0 + 233.0).round(2)
    np.float64(5.55)
    """
    capacity = np.asarray(capacity_wh_per_k, dtype=np.float64)
    time_constant_h: FloatArray = (
        capacity * np.asarray(top_oil_rise_k) / np.asarray(total_loss_w, dtype=np.float64)
    )
    return time_constant_h
