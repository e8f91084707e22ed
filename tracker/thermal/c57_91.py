"""Top-oil and hot-spot temperatures by the exponential method of IEEE C57.91, clause 7.

One function a formula, over numbers or float64 arrays, and `simulate`, which steps them through a
load series. This is the form to read and to check; `tracker.thermal.kernel` computes the same
figures for a whole fleet, many times faster.

Arrays are (n_unit, n_time); temperatures end in `_c`, rises and gradients in `_k`, times in `_h`,
loads per unit of the nameplate rating in `_pu`. NaN marks a gap.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tracker.errors import ModelRangeError
from tracker.settings import LONGEST_CARRIED_HOLE_H, WARM_UP_H, TimeConstant
from tracker.thermal.aging import aging_acceleration_factor, aging_nodes
from tracker.thermal.parameters import ThermalParameters

__all__ = [
    "FleetFigures",
    "Rises",
    "ThermalState",
    "Trace",
    "corrected_time_constant",
    "exponential_step",
    "simulate",
    "steady_state",
    "summarise",
    "ultimate_hot_spot_gradient",
    "ultimate_top_oil_rise",
]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
IntArray = NDArray[np.int64]
LoadArray = NDArray[np.floating[Any]]


# --- The formulas ---------------------------------------------------------------------------------


def _float(values: ArrayLike) -> FloatArray:
    return np.asarray(values, dtype=np.float64)


def ultimate_top_oil_rise(
    load_pu: ArrayLike,
    rated_top_oil_rise_k: ArrayLike,
    loss_ratio: ArrayLike,
    oil_exponent: ArrayLike,
) -> FloatArray:
    r"""Top-oil rise over ambient that a constant load leads to.

    Parameters
    ----------
    load_pu : array_like, shape (...)
        Load K per unit of the rating. [1]
    rated_top_oil_rise_k : array_like, broadcastable
        Top-oil rise at rated load. [K]
    loss_ratio : array_like, broadcastable
        R, load loss at rated load over no-load loss. [1]
    oil_exponent : array_like, broadcastable
        n. [1]

    Returns
    -------
    ndarray of float64, shape (...)
        Ultimate top-oil rise. [K]

    Notes
    -----
    .. math:: \Delta\Theta_{TO,U} = \Delta\Theta_{TO,R}
              \left(\frac{K^2 R + 1}{R + 1}\right)^n

    References
    ----------
    .. [1] IEEE C57.91-2011, clause 7, top-oil rise over ambient.

    Examples
    --------
    >>> ultimate_top_oil_rise([0.5, 1.0, 1.5], 53.0, 5.0, 0.8).round(2)
    array([24.18, 53.  , 93.81])
    """
    ratio = _float(loss_ratio)
    losses_pu = (np.square(_float(load_pu)) * ratio + 1.0) / (ratio + 1.0)
    rise: FloatArray = _float(rated_top_oil_rise_k) * np.power(losses_pu, _float(oil_exponent))
    return rise


def ultimate_hot_spot_gradient(
    load_pu: ArrayLike, rated_gradient_k: ArrayLike, winding_exponent: ArrayLike
) -> FloatArray:
    r"""Hottest-spot rise over top oil that a constant load leads to.

    Parameters
    ----------
    load_pu : array_like, shape (...)
        Load K per unit of the rating. [1]
    rated_gradient_k : array_like, broadcastable
        Hottest spot over top oil at rated load. [K]
    winding_exponent : array_like, broadcastable
        m. [1]

    Returns
    -------
    ndarray of float64, shape (...)
        Ultimate gradient. [K]

    Notes
    -----
    .. math:: \Delta\Theta_{H,U} = \Delta\Theta_{H,R} \, K^{2m}

    References
    ----------
    .. [1] IEEE C57.91-2011, clause 7, winding hottest-spot rise over top oil.

    Examples
    --------
    >>> ultimate_hot_spot_gradient([0.0, 1.0, 1.5], 27.0, 0.8).round(2)
    array([ 0.  , 27.  , 51.65])
    """
    square = np.square(_float(load_pu))
    gradient: FloatArray = _float(rated_gradient_k) * np.power(square, _float(winding_exponent))
    return gradient


def corrected_time_constant(
    ultimate_rise_k: ArrayLike,
    initial_rise_k: ArrayLike,
    rated_rise_k: ArrayLike,
    rated_time_constant_h: ArrayLike,
    oil_exponent: ArrayLike,
) -> FloatArray:
    r"""Top-oil time constant for a step from one rise to another.

    Parameters
    ----------
    ultimate_rise_k, initial_rise_k : array_like, shape (...)
        Top-oil rise that the load leads to, and the one at the start of the step, >= 0. [K]
    rated_rise_k : array_like, broadcastable
        Top-oil rise at rated load. [K]
    rated_time_constant_h : array_like, broadcastable
        Time constant at rated load, starting cold. [h]
    oil_exponent : array_like, broadcastable
        n. [1]

    Returns
    -------
    ndarray of float64, shape (...)
        Time constant of this step. [h]

    Notes
    -----
    With x and y the ultimate and the initial rise over the rated rise,

    .. math:: \tau = \tau_R \frac{x - y}{x^{1/n} - y^{1/n}}

    Where the two meet, the fraction is replaced by its limit n x^(1 - 1/n), taken half-way between
    them; the difference is of second order, below 1e-10 where the switch is made.

    References
    ----------
    .. [1] IEEE C57.91-2011, clause 7, oil thermal time constant for any load.

    Examples
    --------
    From no rise at all to the rated one, and at the rated one:

    >>> corrected_time_constant(53.0, [0.0, 53.0], 53.0, 6.0, 0.8).round(4)
    array([6. , 4.8])
    """
    x = _float(ultimate_rise_k) / _float(rated_rise_k)
    y = _float(initial_rise_k) / _float(rated_rise_k)
    exponent = _float(oil_exponent)
    difference = x - y
    meet = np.abs(difference) < 1e-5
    with np.errstate(divide="ignore"):  # no rise and none to come: an endless time constant
        limit = exponent * np.power((x + y) / 2.0, 1.0 - 1.0 / exponent)
    drive = np.power(x, 1.0 / exponent) - np.power(y, 1.0 / exponent)
    ratio = np.where(meet, limit, difference / np.where(meet, 1.0, drive))
    time_constant_h: FloatArray = _float(rated_time_constant_h) * ratio
    return time_constant_h


def exponential_step(
    ultimate_k: ArrayLike, initial_k: ArrayLike, step_h: ArrayLike, time_constant_h: ArrayLike
) -> FloatArray:
    r"""Rise or gradient after a time at constant load.

    Parameters
    ----------
    ultimate_k, initial_k : array_like, shape (...)
        Value that the load leads to, and the one at the start. [K]
    step_h : array_like, broadcastable
        Time since the start. [h]
    time_constant_h : array_like, broadcastable
        Time constant. [h]

    Returns
    -------
    ndarray of float64, shape (...)
        Value at the end of the step. [K]

    Notes
    -----
    .. math:: \Delta\Theta = \Delta\Theta_U
              + (\Delta\Theta_I - \Delta\Theta_U) \exp(-\Delta t / \tau)

    References
    ----------
    .. [1] IEEE C57.91-2011, clause 7, exponential change of the top oil and of the winding.

    Examples
    --------
    >>> exponential_step(50.0, 0.0, [0.0, 3.0, 300.0], 3.0).round(3)
    array([ 0.   , 31.606, 50.   ])
    """
    goal = _float(ultimate_k)
    decay = np.exp(-_float(step_h) / _float(time_constant_h))
    value: FloatArray = goal + (_float(initial_k) - goal) * decay
    return value


@dataclass(frozen=True, slots=True)
class Rises:
    """The two rises that add up to the hot spot; arrays of shape (n_unit,)."""

    top_oil_rise_k: FloatArray  #: top oil over ambient [K]
    hot_spot_gradient_k: FloatArray  #: hottest spot over top oil [K]

    @property
    def hot_spot_rise_k(self) -> FloatArray:
        """Hottest spot over ambient. [K]"""
        return self.top_oil_rise_k + self.hot_spot_gradient_k


def steady_state(load_pu: ArrayLike, parameters: ThermalParameters) -> Rises:
    """Return the rises that a constant load leads to.

    Parameters
    ----------
    load_pu : array_like, shape (n_unit,) or scalar
        Load K per unit of the rating. [1]
    parameters : ThermalParameters
        The units.

    Returns
    -------
    Rises
        Arrays of shape (n_unit,). [K]

    Examples
    --------
    >>> import numpy as np
    >>> unit = ThermalParameters(*map(np.array, (50, 53, 27, 5, 0.8, 0.8, 6, 1 / 12, 110)))
    >>> steady_state(1.5, unit).hot_spot_rise_k.round(2)
    array([145.47])
    """
    p = parameters
    return Rises(
        ultimate_top_oil_rise(load_pu, p.top_oil_rise_k, p.loss_ratio, p.oil_exponent),
        ultimate_hot_spot_gradient(load_pu, p.hot_spot_gradient_k, p.winding_exponent),
    )


# --- What a run starts from and what it gives -----------------------------------------------------


@dataclass(frozen=True, slots=True)
class ThermalState:
    """All that a run leaves behind and the next one needs to go on; arrays of shape (n_unit,)."""

    top_oil_rise_k: FloatArray  #: top oil over ambient; NaN before the first known load [K]
    hot_spot_gradient_k: FloatArray  #: hottest spot over top oil; NaN likewise [K]
    last_load_pu: FloatArray  #: load that a hole is bridged with; NaN where none is known yet [1]
    hole_h: FloatArray  #: length so far of the hole the series ends in, 0 if in none [h]
    warm_up_left_h: FloatArray  #: time still to come that counts in no figure [h]

    @classmethod
    def unknown(cls, n_unit: int) -> ThermalState:
        """Return the state of units of which nothing is known yet."""
        nan = np.full(n_unit, np.nan)
        return cls(nan, nan.copy(), nan.copy(), np.zeros(n_unit), np.full(n_unit, WARM_UP_H))

    @property
    def n_unit(self) -> int:
        """Number of units."""
        return len(self.last_load_pu)


@dataclass(frozen=True, slots=True)
class Trace:
    """Units interval by interval; arrays of shape (n_unit, n_time).

    Temperatures and aging are NaN where load or air temperature is missing: the state is carried
    through such intervals, but nothing is shown that nobody measured.
    """

    top_oil_c: FloatArray  #: at the end of the interval [°C]
    hot_spot_c: FloatArray  #: at the end of the interval [°C]
    aging_factor: FloatArray  #: mean of F_AA over the interval [1]
    counted: BoolArray  #: whether the interval counts in the figures
    end_state: ThermalState  #: state after the last interval


@dataclass(frozen=True, slots=True)
class FleetFigures:
    """What an assessment says of each unit over its counted intervals; shape (n_unit,) each."""

    peak_load_pu: FloatArray  #: highest load of an interval; NaN where nothing counts [1]
    peak_hot_spot_c: FloatArray  #: highest hot spot at the end of an interval; NaN likewise [°C]
    peak_hot_spot_index: IntArray  #: interval of that peak, the first one on ties; -1 for none
    peak_top_oil_c: FloatArray  #: highest top oil at the end of an interval; NaN likewise [°C]
    hours_over_rating: FloatArray  #: time with K > 1 [h]
    hours_over_hot_spot_limit: FloatArray  #: time of intervals that end over the limit [h]
    aging_hours: FloatArray  #: integral of F_AA [h]
    counted_hours: FloatArray  #: time that counts [h]
    state: ThermalState  #: state after the last interval


# --- Counting -------------------------------------------------------------------------------------


def checked_step(step_h: float) -> float:
    """Return the interval length; refuse one that is not a part of a day."""
    if not 0.0 < step_h <= WARM_UP_H:
        raise ModelRangeError(
            f"step_h = {step_h:g} h is no interval length; allowed above 0 to {WARM_UP_H:g} h. "
            "Readings come every 5 to 60 minutes."
        )
    return step_h


def checked_shape(load_kva: LoadArray, parameters: ThermalParameters) -> tuple[int, int]:
    """Return (n_unit, n_time) of the loads; refuse loads of other units than the parameters'."""
    if load_kva.ndim != 2 or len(load_kva) != parameters.n_unit or not load_kva.size:
        raise ModelRangeError(
            f"load_kva = array of shape {load_kva.shape} is not one row a unit; "
            f"allowed ({parameters.n_unit}, 1 or more). Give loads and parameters of the same units."
        )
    n_unit, n_time = load_kva.shape
    return n_unit, n_time


def checked_state(state: ThermalState | None, n_unit: int) -> ThermalState:
    """Return the state to start from, unknown for none; refuse one of another number of units."""
    if state is None:
        return ThermalState.unknown(n_unit)
    if state.n_unit != n_unit:
        raise ModelRangeError(
            f"state = {state.n_unit} units is not the state of this fleet; allowed {n_unit} units. "
            "Continue a run with the units it was made with, in the same order."
        )
    return state


def intervals_in(time_h: float, step_h: float) -> int:
    """Return how many whole intervals a time holds; a day holds 72 of a third of an hour."""
    return math.floor(time_h / step_h + 1e-6)


def _starting_load(
    load_kva: LoadArray, parameters: ThermalParameters, step_h: float
) -> tuple[IntArray, FloatArray]:
    """Return where each series begins, and the root-mean-square load [pu] of 24 h from there.

    A series begins at its first known load; where there is none, at n_time with a load of NaN.
    """
    n_unit, n_time = load_kva.shape
    day = intervals_in(WARM_UP_H, step_h)
    begins = np.full(n_unit, n_time, dtype=np.int64)
    load_pu = np.full(n_unit, np.nan)
    for unit in range(n_unit):
        known = np.flatnonzero(np.isfinite(load_kva[unit]))
        if known.size:
            begins[unit] = known[0]
            first_day = load_kva[unit, known[known < known[0] + day]].astype(np.float64)
            load_pu[unit] = np.sqrt(np.mean(np.square(first_day))) / parameters.rated_kva[unit]
    return begins, load_pu


# --- The run --------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Approach:
    """How the rises move within one interval; arrays of shape (n_unit,)."""

    start: Rises
    goal: Rises
    top_oil_time_constant_h: FloatArray
    winding_time_constant_h: FloatArray

    def after(self, time_h: ArrayLike) -> Rises:
        """Return the rises some time after the start of the interval."""
        start, goal = self.start, self.goal
        return Rises(
            exponential_step(
                goal.top_oil_rise_k, start.top_oil_rise_k, time_h, self.top_oil_time_constant_h
            ),
            exponential_step(
                goal.hot_spot_gradient_k,
                start.hot_spot_gradient_k,
                time_h,
                self.winding_time_constant_h,
            ),
        )

    def mean_aging_factor(
        self,
        air_temp_c: FloatArray,
        reference_hot_spot_c: FloatArray,
        nodes: tuple[FloatArray, FloatArray],
    ) -> FloatArray:
        """Return the mean of F_AA over the interval, taken at the nodes of `aging_nodes`."""
        mean = np.zeros_like(reference_hot_spot_c)
        for time_h, weight in zip(*nodes, strict=True):
            hot_spot_c = air_temp_c + self.after(time_h).hot_spot_rise_k
            mean += weight * aging_acceleration_factor(hot_spot_c, reference_hot_spot_c)
        return mean


class _Counter:
    """Decides which intervals count.

    Times are kept as numbers of intervals, so that no rounding decides whether a day is over.
    """

    def __init__(self, state: ThermalState, step_h: float) -> None:
        self.step_h = step_h
        self.day = intervals_in(WARM_UP_H, step_h)
        self.longest_hole = intervals_in(LONGEST_CARRIED_HOLE_H, step_h)
        self.hole = np.rint(state.hole_h / step_h).astype(np.int64)
        self.warm_up_left = np.rint(state.warm_up_left_h / step_h).astype(np.int64)

    def counts(self, begun: BoolArray, whole: BoolArray) -> BoolArray:
        """Take in one interval: whether each series has begun, and knows its load and air."""
        whole = begun & whole
        after_long_hole = whole & (self.hole > self.longest_hole)
        warm_up_left = np.where(after_long_hole, self.day, self.warm_up_left)
        self.hole = np.where(begun & ~whole, self.hole + 1, 0)
        self.warm_up_left = np.where(begun, np.maximum(warm_up_left - 1, 0), warm_up_left)
        counts: BoolArray = whole & (warm_up_left == 0)
        return counts

    @property
    def hole_h(self) -> FloatArray:
        return self.hole.astype(np.float64) * self.step_h

    @property
    def warm_up_left_h(self) -> FloatArray:
        return self.warm_up_left.astype(np.float64) * self.step_h


def simulate(
    load_kva: LoadArray,
    air_temp_c: LoadArray,
    parameters: ThermalParameters,
    step_h: float,
    *,
    time_constant: TimeConstant = "corrected",
    state: ThermalState | None = None,
) -> Trace:
    """Step units through their loads, interval by interval.

    Parameters
    ----------
    load_kva : ndarray, shape (n_unit, n_time)
        Mean load of each interval, a magnitude. What is not finite is a gap. [kVA]
    air_temp_c : ndarray, broadcastable to (n_unit, n_time)
        Ambient temperature of each interval; gaps likewise. [°C]
    parameters : ThermalParameters
        The units.
    step_h : float
        Length of every interval. [h]
    time_constant : {"corrected", "rated"}
        Whether the top-oil time constant is corrected for each interval, or kept as at rated load.
    state : ThermalState, optional
        Where an earlier run ended. Without it, and for units of which it knows no load, a series
        begins at its first known load, in the steady state of the root-mean-square load of the 24 h
        from there, and these 24 h count in no figure.

    Returns
    -------
    Trace
        Temperatures, aging and whether they count, and the state at the end.

    Raises
    ------
    ModelRangeError
        If the interval length is not a part of a day, or a temperature lies below absolute zero.

    Notes
    -----
    Over an interval without load the state is carried with the last known load; where only the air
    temperature is missing, with the load itself. Neither counts. After a hole longer than 24 h the
    next 24 h do not count either.

    A run that is cut and continued from its state gives what one run in one piece gives, unless the
    cut falls within 24 h of the first known load: then less of the first day is known at the start.

    Examples
    --------
    >>> import numpy as np
    >>> unit = ThermalParameters(
    ...     rated_kva=np.array([50.0]),
    ...     top_oil_rise_k=np.array([53.0]),
    ...     hot_spot_gradient_k=np.array([27.0]),
    ...     loss_ratio=np.array([5.0]),
    ...     oil_exponent=np.array([0.8]),
    ...     winding_exponent=np.array([0.8]),
    ...     top_oil_time_constant_h=np.array([6.0]),
    ...     winding_time_constant_h=np.array([1 / 12]),
    ...     reference_hot_spot_c=np.array([110.0]),
    ... )
    >>> load_kva = np.full((1, 48), 50.0)
    >>> trace = simulate(load_kva, np.array(30.0), unit, step_h=1.0)
    >>> trace.hot_spot_c[0, -1].round(6), trace.aging_factor[0, -1].round(6)
    (np.float64(110.0), np.float64(1.0))
    >>> figures = summarise(trace, load_kva, unit, step_h=1.0, hot_spot_limit_c=140.0)
    >>> figures.counted_hours, figures.aging_hours.round(6)
    (array([24.]), array([24.]))
    """
    n_unit, n_time = checked_shape(load_kva, parameters)
    air = np.broadcast_to(air_temp_c, (n_unit, n_time))
    p = parameters
    before = checked_state(state, n_unit)
    counter = _Counter(before, checked_step(step_h))

    first_load, starting_load_pu = _starting_load(load_kva, p, step_h)
    continued = np.isfinite(before.last_load_pu)
    first_load[continued] = 0
    start = steady_state(starting_load_pu, p)
    rises = Rises(
        np.where(continued, before.top_oil_rise_k, start.top_oil_rise_k),
        np.where(continued, before.hot_spot_gradient_k, start.hot_spot_gradient_k),
    )
    last_load_pu = before.last_load_pu

    nodes = aging_nodes(step_h, p.winding_time_constant_h)
    # Time comes first while stepping: what is written together lies together.
    top_oil_c, hot_spot_c, aging_factor = (np.full((n_time, n_unit), np.nan) for _ in range(3))
    counted = np.zeros((n_time, n_unit), dtype=np.bool_)
    for t in range(n_time):
        load_now_kva = np.asarray(load_kva[:, t], dtype=np.float64)
        air_now_c = np.asarray(air[:, t], dtype=np.float64)
        begun = t >= first_load
        load_known = np.isfinite(load_now_kva)
        whole = load_known & np.isfinite(air_now_c)

        load_pu = np.where(load_known, load_now_kva / p.rated_kva, last_load_pu)
        goal = steady_state(load_pu, p)
        tau_h = p.top_oil_time_constant_h
        if time_constant == "corrected":
            tau_h = corrected_time_constant(
                goal.top_oil_rise_k, rises.top_oil_rise_k, p.top_oil_rise_k, tau_h, p.oil_exponent
            )
        approach = _Approach(rises, goal, tau_h, p.winding_time_constant_h)
        end = approach.after(step_h)
        rises = Rises(
            np.where(begun, end.top_oil_rise_k, rises.top_oil_rise_k),
            np.where(begun, end.hot_spot_gradient_k, rises.hot_spot_gradient_k),
        )
        last_load_pu = load_pu

        shown_air_c = np.where(whole, air_now_c, np.nan)
        top_oil_c[t] = shown_air_c + rises.top_oil_rise_k
        hot_spot_c[t] = shown_air_c + rises.hot_spot_rise_k
        aging_factor[t] = approach.mean_aging_factor(shown_air_c, p.reference_hot_spot_c, nodes)
        counted[t] = counter.counts(begun, whole)

    known = np.isfinite(last_load_pu)
    return Trace(
        top_oil_c.T,
        hot_spot_c.T,
        aging_factor.T,
        counted.T,
        ThermalState(
            np.where(known, rises.top_oil_rise_k, np.nan),
            np.where(known, rises.hot_spot_gradient_k, np.nan),
            last_load_pu,
            counter.hole_h,
            counter.warm_up_left_h,
        ),
    )


def summarise(
    trace: Trace,
    load_kva: LoadArray,
    parameters: ThermalParameters,
    step_h: float,
    hot_spot_limit_c: float,
) -> FleetFigures:
    """Add up a trace.

    Parameters
    ----------
    trace : Trace
        Run of the units, from `simulate`.
    load_kva : ndarray, shape (n_unit, n_time)
        The loads it was made with. [kVA]
    parameters : ThermalParameters
        The units.
    step_h : float
        Length of every interval. [h]
    hot_spot_limit_c : float
        Limit that `hours_over_hot_spot_limit` counts against. [°C]

    Returns
    -------
    FleetFigures
        Figures of each unit over its counted intervals.
    """
    counted = trace.counted
    hot_spot_c = np.where(counted, trace.hot_spot_c, -np.inf)
    top_oil_c = np.where(counted, trace.top_oil_c, -np.inf)
    load_pu = np.where(counted, load_kva / parameters.rated_kva[:, np.newaxis], -np.inf)
    some = counted.any(axis=1)

    def peak(values: FloatArray) -> FloatArray:
        return np.where(some, values.max(axis=1, initial=-np.inf), np.nan)

    def hours(condition: BoolArray) -> FloatArray:
        number: FloatArray = condition.sum(axis=1, dtype=np.float64)
        return number * step_h

    return FleetFigures(
        peak_load_pu=peak(load_pu),
        peak_hot_spot_c=peak(hot_spot_c),
        peak_hot_spot_index=np.where(some, hot_spot_c.argmax(axis=1), -1),
        peak_top_oil_c=peak(top_oil_c),
        hours_over_rating=hours(load_pu > 1.0),
        hours_over_hot_spot_limit=hours(hot_spot_c > hot_spot_limit_c),
        aging_hours=np.where(counted, trace.aging_factor, 0.0).sum(axis=1) * step_h,
        counted_hours=hours(counted),
        state=trace.end_state,
    )
