"""Aging of the winding insulation as a function of the hot spot, IEEE C57.91.

Pure functions: numbers or arrays in, float64 out, no I/O and no configuration. Temperatures are in
degrees Celsius (`_c`). NaN marks a gap and passes through.

The guide writes the absolute temperature with 273, not 273.15, and its printed table is only met
that way.
"""

from __future__ import annotations

from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tracker.errors import ModelRangeError

__all__ = [
    "NORMAL_INSULATION_LIFE_H",
    "aging_acceleration_factor",
    "aging_nodes",
    "equivalent_aging_factor",
    "loss_of_life_pct",
    "per_unit_life",
]

FloatArray = NDArray[np.float64]

#: Slope B of the Arrhenius law of C57.91 [K].
ARRHENIUS_SLOPE_K = 15_000.0

#: What the guide adds to degrees Celsius to get kelvin [K].
ABSOLUTE_ZERO_OFFSET_K = 273.0

#: Life at the reference hot spot [h] and the criterion that ends it; C57.91, from memory.
NORMAL_INSULATION_LIFE_H = MappingProxyType(
    {
        65_000.0: "50 % of the tensile strength retained",
        135_000.0: "25 % of the tensile strength retained",
        150_000.0: "degree of polymerisation 200",
        180_000.0: "functional-life tests of distribution transformers",
    }
)

#: Instants within an interval at which F_AA is taken for its mean over the interval.
N_NODE = 5


def _kelvin(hot_spot_c: ArrayLike) -> FloatArray:
    """Return the temperature above absolute zero as C57.91 reckons it, or refuse it."""
    celsius = np.asarray(hot_spot_c, dtype=np.float64)
    impossible = celsius <= -ABSOLUTE_ZERO_OFFSET_K  # NaN compares False: gaps pass through
    if np.any(impossible):
        raise ModelRangeError(
            f"hot_spot_c = {celsius[impossible].flat[0]:g} °C is below absolute zero; "
            f"allowed above {-ABSOLUTE_ZERO_OFFSET_K:g} °C. Check the unit of the temperatures."
        )
    return celsius + ABSOLUTE_ZERO_OFFSET_K


def aging_acceleration_factor(
    hot_spot_c: ArrayLike, reference_hot_spot_c: ArrayLike = 110.0
) -> FloatArray:
    r"""Rate of aging relative to that at the reference hot spot, F_AA.

    Parameters
    ----------
    hot_spot_c : array_like, shape (...)
        Hottest-spot temperature of the winding, above -273. [°C]
    reference_hot_spot_c : array_like, broadcastable
        Hot spot of normal aging: 110 for 65 °C rise, 95 for 55 °C rise. [°C]

    Returns
    -------
    ndarray of float64, shape (...)
        F_AA; NaN where the hot spot is NaN. [1]

    Raises
    ------
    ModelRangeError
        If a temperature lies below absolute zero.

    Notes
    -----
    .. math:: F_{AA} = \exp\left(\frac{15000}{\theta_{ref} + 273}
              - \frac{15000}{\theta_H + 273}\right)

    References
    ----------
    .. [1] IEEE C57.91-2011, clause 5, aging acceleration factor.

    Examples
    --------
    >>> aging_acceleration_factor([98.0, 110.0, 140.0]).round(3)
    array([ 0.282,  1.   , 17.199])
    """
    reference = ARRHENIUS_SLOPE_K / _kelvin(reference_hot_spot_c)
    factor: FloatArray = np.exp(reference - ARRHENIUS_SLOPE_K / _kelvin(hot_spot_c))
    return factor


def per_unit_life(hot_spot_c: ArrayLike, a: float = 9.80e-18) -> FloatArray:
    r"""Insulation life at a constant hot spot, relative to normal life.

    Parameters
    ----------
    hot_spot_c : array_like, shape (...)
        Hottest-spot temperature of the winding, above -273. [°C]
    a : float
        Constant A: 9.80e-18 for 65 °C rise, 2.00e-18 for 55 °C rise. [1]

    Returns
    -------
    ndarray of float64, shape (...)
        Per-unit life. [1]

    Raises
    ------
    ModelRangeError
        If a temperature lies below absolute zero.

    Notes
    -----
    .. math:: L = A \exp\left(\frac{15000}{\theta_H + 273}\right)

    A is rounded in print, so L at the reference hot spot misses 1 by 0.03 % (65 °C rise) and 0.75 %
    (55 °C rise); `aging_acceleration_factor` is exact there and is what the figures are made with.

    References
    ----------
    .. [1] IEEE C57.91-2011, clause 5, per-unit life.

    Examples
    --------
    >>> per_unit_life([110.0, 120.0]).round(3)
    array([1.   , 0.369])
    """
    life: FloatArray = a * np.exp(ARRHENIUS_SLOPE_K / _kelvin(hot_spot_c))
    return life


def equivalent_aging_factor(aging_hours: ArrayLike, hours: ArrayLike) -> FloatArray:
    """Mean rate of aging over a time, F_EQA.

    Parameters
    ----------
    aging_hours : array_like, shape (...)
        Integral of F_AA over the time: hours at the reference hot spot that age as much. [h]
    hours : array_like, shape (...)
        The time. [h]

    Returns
    -------
    ndarray of float64, shape (...)
        F_EQA; NaN where no hour is counted. [1]

    References
    ----------
    .. [1] IEEE C57.91-2011, clause 5, equivalent aging factor.

    Examples
    --------
    >>> equivalent_aging_factor([12.0, 36.0, 0.0], [24.0, 24.0, 0.0])
    array([0.5, 1.5, nan])
    """
    time = np.asarray(hours, dtype=np.float64)
    factor: FloatArray = np.asarray(aging_hours, dtype=np.float64) / np.where(
        time > 0.0, time, np.nan
    )
    return factor


def loss_of_life_pct(aging_hours: ArrayLike, life_h: ArrayLike) -> FloatArray:
    """Share of the normal insulation life that has been used.

    Parameters
    ----------
    aging_hours : array_like, shape (...)
        Integral of F_AA over the time. [h]
    life_h : array_like, broadcastable
        Normal insulation life at the reference hot spot, see `NORMAL_INSULATION_LIFE_H`. [h]

    Returns
    -------
    ndarray of float64, shape (...)
        Life used. [%]

    Raises
    ------
    ModelRangeError
        If a life is not above 0 h.

    References
    ----------
    .. [1] IEEE C57.91-2011, clause 5, percent loss of life.

    Examples
    --------
    A day at the reference hot spot, against 180 000 h:

    >>> loss_of_life_pct(24.0, 180_000.0).round(4)
    np.float64(0.0133)
    """
    life = np.asarray(life_h, dtype=np.float64)
    if not np.all(life > 0.0):
        raise ModelRangeError(
            f"life_h = {np.min(life):g} h is no insulation life; allowed above 0 h. "
            "The guide gives 65 000, 135 000, 150 000 and 180 000 h."
        )
    return 100.0 * np.asarray(aging_hours, dtype=np.float64) / life


def aging_nodes(step_h: float, winding_time_constant_h: ArrayLike) -> tuple[FloatArray, FloatArray]:
    r"""When to take F_AA within an interval, so that few values give its mean.

    Parameters
    ----------
    step_h : float
        Length of the interval. [h]
    winding_time_constant_h : array_like, shape (n_unit,)
        Time constant of the winding. [h]

    Returns
    -------
    time_h : ndarray of float64, shape (N_NODE, n_unit)
        Times after the start of the interval. [h]
    weight : ndarray of float64, shape (N_NODE, n_unit)
        What F_AA at each of these times contributes to the mean. [1]

    Notes
    -----
    Gauss-Legendre nodes in s between 0 and 1, with

    .. math:: t = \tau_w \left[(1 + \Delta t/\tau_w)^s - 1\right]

    They lie close together while the winding follows the load, within minutes, and far apart
    afterwards, when only the oil moves. Sums over series of hard steps between 0.1 and 2 per unit
    come within 0.2 % at intervals from 5 to 60 min and winding time constants from 2 to 12 min.

    Examples
    --------
    >>> time_h, weight = aging_nodes(1.0, [1 / 12])
    >>> (60.0 * time_h[:, 0]).round(1)
    array([ 0.6,  4. , 13. , 31. , 52.6])
    >>> weight.sum(axis=0).round(6)
    array([1.])
    """
    tau_h = np.asarray(winding_time_constant_h, dtype=np.float64)
    roots, root_weights = np.polynomial.legendre.leggauss(N_NODE)
    s = (roots[:, np.newaxis] + 1.0) / 2.0
    growth = np.log1p(step_h / tau_h)
    time_h = tau_h * np.expm1(growth * s)
    weight = root_weights[:, np.newaxis] / 2.0 * growth * (tau_h + time_h) / step_h
    return time_h, weight
