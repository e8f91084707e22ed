"""The figures of `c57_91.simulate` and `summarise` for a whole fleet, compiled.

Units are taken 64 at a time, and each interval is computed for all 64 in a loop that the compiler
turns into vector instructions. For that the loop has no branch and calls no library function:
powers and exponentials are polynomials (`_polynomials`), gaps and counting are masks. Loads lie
unit by unit in memory, so a short stretch of time is first turned round into a tile that stays in
the cache. Groups of 64 go to a pool of threads; no unit sees which other units share its group, so
every figure is the same to the bit whatever the number of threads and the order of the units.

Numbers are float32, sums of aging float64. Rises are kept per unit of the rated ones.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np
from numba import njit, types
from numpy.typing import ArrayLike, NDArray

from tracker.errors import ModelRangeError
from tracker.settings import LONGEST_CARRIED_HOLE_H, WARM_UP_H, TimeConstant
from tracker.thermal._polynomials import (
    FAST_MATH,
    choose,
    exp2,
    exp2_less_1,
    larger,
    log2,
)
from tracker.thermal.aging import (
    ABSOLUTE_ZERO_OFFSET_K,
    ARRHENIUS_SLOPE_K,
    N_NODE,
    aging_nodes,
)
from tracker.thermal.c57_91 import (
    FleetFigures,
    ThermalState,
    Trace,
    checked_shape,
    checked_state,
    checked_step,
    intervals_in,
)
from tracker.thermal.parameters import ThermalParameters

__all__ = ["assess_fleet", "trace_fleet"]

FloatArray = NDArray[np.float64]
Float32Array = NDArray[np.float32]

#: Units computed abreast.
LANES = 64

#: Intervals turned round at a time: two tiles of 64 x 64 float32 are 32 kB.
TILE = 64

# The rows of a group: one float32 array holds everything about its 64 units, LANES numbers a row.
# One array, because the compiler must see that what it writes is not what it reads next to it.
(
    # What the units are
    RATED_KVA,
    PER_RATED_KVA,
    LOAD_LOSS_SHARE,  # R/(R + 1)
    NO_LOAD_LOSS_SHARE,  # 1/(R + 1)
    OIL_EXPONENT,
    PER_OIL_EXPONENT,
    WINDING_EXPONENT,
    RATED_TOP_OIL_RISE_K,
    RATED_GRADIENT_K,
    STEP_PER_TIME_CONSTANT,  # of the oil at rated load, times -log2(e)
    CORRECTED,  # 1 where the time constant follows the load, 0 where it stays
    WINDING_GAIN,  # part of its way that the winding gets in an interval
    REFERENCE_HOT_SPOT_C,
    AGING_SLOPE,  # of log2 F_AA, see below
    # Where they stand
    FIRST_LOAD,  # index of the first interval of the series
    TOP_OIL_RISE_PU,
    GRADIENT_PU,
    LAST_LOAD_KVA,
    HOLE,  # intervals
    WARM_UP_LEFT,  # intervals
    # What has been counted
    COUNTED,  # intervals
    OVER_RATING,  # intervals
    OVER_HOT_SPOT_LIMIT,  # intervals
    PEAK_LOAD_KVA,
    PEAK_HOT_SPOT_C,
    PEAK_HOT_SPOT_INDEX,
    PEAK_TOP_OIL_C,
    AGING,  # intervals at the reference hot spot, within the tile
    # What one pass over an interval leaves to the next
    LOAD_KVA,  # of the interval, gaps and all
    AIR_TEMP_C,
    LOAD_NOW_KVA,  # the same, gaps bridged
    LOSSES_PU,
    OIL_WAY_PU,  # from where the oil stands to where the load leads it
    WINDING_WAY_PU,
    OIL_WAY_K,
    WINDING_WAY_K,
    HOT_SPOT_GOAL_C,
    OIL_POWER,  # log2 of the oil's decay over the interval
    MEAN_AGING,  # F_AA
    COUNTS,  # 1 where the interval counts
    TOP_OIL_C,  # at the end
    HOT_SPOT_C,
    # For each instant at which F_AA is taken, the rows below
    INSTANTS,
) = (row * LANES for row in range(43))
(
    TIME_SHARE,  # of the interval
    WEIGHT,  # in the mean
    WINDING_DECAY,  # until then
    HOT_SPOT_THEN_C,
    ROWS_PER_INSTANT,
) = (row * LANES for row in range(5))

#: Rows that are read when a group is done.
REPORTED = (
    TOP_OIL_RISE_PU,
    GRADIENT_PU,
    LAST_LOAD_KVA,
    HOLE,
    WARM_UP_LEFT,
    COUNTED,
    OVER_RATING,
    OVER_HOT_SPOT_LIMIT,
    PEAK_LOAD_KVA,
    PEAK_HOT_SPOT_C,
    PEAK_HOT_SPOT_INDEX,
    PEAK_TOP_OIL_C,
)

ZERO = np.float32(0.0)
ONE = np.float32(1.0)
MINUS_ONE = np.float32(-1.0)
HALF = np.float32(0.5)
KELVIN = np.float32(ABSOLUTE_ZERO_OFFSET_K)
LARGEST = np.finfo(np.float32).max
LOWEST = np.float32(-np.inf)
#: Below this difference of the oil's rise from its goal [pu] the time constant is at its limit:
#: closer, the quotient of differences loses digits; here, either way is off by less than 1e-5 K.
MEETING_PU = np.float32(1e-3)
LOG2_E = math.log2(math.e)


def _compiled(signature: Any) -> Callable[[Callable[..., None]], Callable[..., None]]:
    """Compile for one signature, and keep the outcome on disk where there is a place for it.

    What is kept is renewed when this file changes, not when the polynomials or the constants of the
    other modules do: whoever changes those touches this file too.
    """
    options: dict[str, Any] = {
        "nogil": True,
        "fastmath": FAST_MATH,
        "error_model": "numpy",
    }

    def compile_it(function: Callable[..., None]) -> Callable[..., None]:
        try:
            compiled: Callable[..., None] = njit(signature, cache=True, **options)(function)
        except RuntimeError:  # neither the package nor the user's cache folder can be written
            compiled = njit(signature, **options)(function)
        return compiled

    return compile_it


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def _power(base, exponent):  # type: ignore[no-untyped-def]
    return exp2(exponent * log2(base))


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def _losses_pu(lanes, i, load_pu_squared):  # type: ignore[no-untyped-def]
    """Return (K²R + 1)/(R + 1)."""
    return load_pu_squared * lanes[LOAD_LOSS_SHARE + i] + lanes[NO_LOAD_LOSS_SHARE + i]


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def _begin(lanes, i, load_kva, day):  # type: ignore[no-untyped-def]
    """Put a unit in the steady state of the root-mean-square load of its first day."""
    n_time = load_kva.shape[0]
    first = 0
    while first < n_time and not abs(load_kva[first]) <= LARGEST:
        first += 1
    lanes[FIRST_LOAD + i] = np.float32(first)
    sum_of_squares = 0.0
    n_known = 0
    for t in range(first, min(first + day, n_time)):
        if abs(load_kva[t]) <= LARGEST:
            sum_of_squares += np.float64(load_kva[t]) ** 2
            n_known += 1
    if n_known > 0:
        rms_load_kva = math.sqrt(sum_of_squares / n_known)
        load_pu_squared = np.float32((rms_load_kva / lanes[RATED_KVA + i]) ** 2)
        losses_pu = _losses_pu(lanes, i, load_pu_squared)
        lanes[TOP_OIL_RISE_PU + i] = _power(losses_pu, lanes[OIL_EXPONENT + i])
        lanes[GRADIENT_PU + i] = _power(load_pu_squared, lanes[WINDING_EXPONENT + i])


# An interval is computed in a few passes over the group, each a loop without a branch: every choice
# is a selection between two values. One long loop would do the same work, but a processor sees only
# some 250 instructions ahead; in short loops it overlaps several turns and waits for none.


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def _set_goals(lanes):  # type: ignore[no-untyped-def]
    """Find the rises that the load of the interval leads to."""
    for i in range(LANES):
        load_known = abs(lanes[LOAD_KVA + i]) <= LARGEST
        load_now_kva = choose(load_known, lanes[LOAD_KVA + i], lanes[LAST_LOAD_KVA + i])
        load_pu = load_now_kva * lanes[PER_RATED_KVA + i]
        losses_pu = _losses_pu(lanes, i, load_pu * load_pu)
        oil_goal_pu = _power(losses_pu, lanes[OIL_EXPONENT + i])
        winding_goal_pu = _power(load_pu * load_pu, lanes[WINDING_EXPONENT + i])
        oil_way_pu = oil_goal_pu - lanes[TOP_OIL_RISE_PU + i]
        winding_way_pu = winding_goal_pu - lanes[GRADIENT_PU + i]
        lanes[LOAD_NOW_KVA + i] = load_now_kva
        lanes[LOSSES_PU + i] = losses_pu
        lanes[OIL_WAY_PU + i] = oil_way_pu
        lanes[WINDING_WAY_PU + i] = winding_way_pu
        lanes[OIL_WAY_K + i] = lanes[RATED_TOP_OIL_RISE_K + i] * oil_way_pu
        lanes[WINDING_WAY_K + i] = lanes[RATED_GRADIENT_K + i] * winding_way_pu
        lanes[HOT_SPOT_GOAL_C + i] = (
            lanes[AIR_TEMP_C + i]
            + lanes[RATED_TOP_OIL_RISE_K + i] * oil_goal_pu
            + lanes[RATED_GRADIENT_K + i] * winding_goal_pu
        )


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def _correct_time_constant(lanes):  # type: ignore[no-untyped-def]
    """Find how far the oil gets within the interval: its decay is 2^OIL_POWER.

    tau_R/tau = (x^(1/n) - y^(1/n))/(x - y), and x^(1/n) is the losses themselves.
    """
    for i in range(LANES):
        start_pu = lanes[TOP_OIL_RISE_PU + i]
        way_pu = lanes[OIL_WAY_PU + i]
        losses_pu = lanes[LOSSES_PU + i]
        losses_held_pu = _power(start_pu, lanes[PER_OIL_EXPONENT + i])
        meeting = abs(way_pu) < MEETING_PU
        dividend = choose(meeting, losses_pu + losses_held_pu, losses_pu - losses_held_pu)
        limit_divisor = lanes[OIL_EXPONENT + i] * (start_pu + start_pu + way_pu)
        quickening = dividend / choose(meeting, limit_divisor, way_pu)
        quickening = choose(lanes[CORRECTED + i] > ZERO, quickening, ONE)
        lanes[OIL_POWER + i] = lanes[STEP_PER_TIME_CONSTANT + i] * quickening


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def _look_inside(lanes):  # type: ignore[no-untyped-def]
    """Find the hot spot at the instants of the interval at which F_AA is taken."""
    for i in range(LANES):
        for node in range(N_NODE):
            instant = INSTANTS + ROWS_PER_INSTANT * node + i
            oil_decay = exp2(lanes[TIME_SHARE + instant] * lanes[OIL_POWER + i])
            lanes[HOT_SPOT_THEN_C + instant] = (
                lanes[HOT_SPOT_GOAL_C + i]
                - lanes[OIL_WAY_K + i] * oil_decay
                - lanes[WINDING_WAY_K + i] * lanes[WINDING_DECAY + instant]
            )


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def _take_mean_aging(lanes):  # type: ignore[no-untyped-def]
    """Take the mean of F_AA over the interval.

    The two quotients of the guide are brought together, so that few digits cancel:
    log2 F_AA = B log2(e) (theta - ref) / ((ref + 273)(theta + 273)).
    """
    for i in range(LANES):
        mean = ZERO
        for node in range(N_NODE):
            instant = INSTANTS + ROWS_PER_INSTANT * node + i
            hot_spot_c = lanes[HOT_SPOT_THEN_C + instant]
            above_reference_k = hot_spot_c - lanes[REFERENCE_HOT_SPOT_C + i]
            power = lanes[AGING_SLOPE + i] * above_reference_k / (hot_spot_c + KELVIN)
            mean += lanes[WEIGHT + instant] * exp2(power)
        lanes[MEAN_AGING + i] = mean


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def _advance(lanes, t):  # type: ignore[no-untyped-def]
    """Bring the units to the end of the interval, those whose series has begun."""
    for i in range(LANES):
        begun = t >= lanes[FIRST_LOAD + i]
        oil_change_pu = -lanes[OIL_WAY_PU + i] * exp2_less_1(lanes[OIL_POWER + i])
        winding_change_pu = lanes[WINDING_WAY_PU + i] * lanes[WINDING_GAIN + i]
        oil_pu = lanes[TOP_OIL_RISE_PU + i] + choose(begun, oil_change_pu, ZERO)
        winding_pu = lanes[GRADIENT_PU + i] + choose(begun, winding_change_pu, ZERO)
        top_oil_c = lanes[AIR_TEMP_C + i] + lanes[RATED_TOP_OIL_RISE_K + i] * oil_pu
        lanes[TOP_OIL_RISE_PU + i] = oil_pu
        lanes[GRADIENT_PU + i] = winding_pu
        lanes[TOP_OIL_C + i] = top_oil_c
        lanes[HOT_SPOT_C + i] = top_oil_c + lanes[RATED_GRADIENT_K + i] * winding_pu
        lanes[LAST_LOAD_KVA + i] = lanes[LOAD_NOW_KVA + i]


@njit(nogil=True, fastmath=FAST_MATH, error_model="numpy")
def _count(lanes, t, hot_spot_limit_c, day, longest_hole):  # type: ignore[no-untyped-def]
    """Decide whether the interval counts, as `c57_91._Counter` does, and add up what it brings."""
    for i in range(LANES):
        begun = t >= lanes[FIRST_LOAD + i]
        load_known = abs(lanes[LOAD_KVA + i]) <= LARGEST
        whole = begun & load_known & (abs(lanes[AIR_TEMP_C + i]) <= LARGEST)
        hole = lanes[HOLE + i]
        warm_up_left = choose(whole & (hole > longest_hole), day, lanes[WARM_UP_LEFT + i])
        counts = whole & (warm_up_left == ZERO)
        lanes[HOLE + i] = choose(begun & ~whole, hole + ONE, ZERO)
        lanes[WARM_UP_LEFT + i] = warm_up_left - choose(begun & (warm_up_left > ZERO), ONE, ZERO)

        load_now_kva = lanes[LOAD_NOW_KVA + i]
        hot_spot_c = lanes[HOT_SPOT_C + i]
        over_rating = counts & (load_now_kva > lanes[RATED_KVA + i])
        over_limit = counts & (hot_spot_c > hot_spot_limit_c)
        lanes[COUNTS + i] = choose(counts, ONE, ZERO)
        lanes[COUNTED + i] += lanes[COUNTS + i]
        lanes[OVER_RATING + i] += choose(over_rating, ONE, ZERO)
        lanes[OVER_HOT_SPOT_LIMIT + i] += choose(over_limit, ONE, ZERO)
        lanes[AGING + i] += choose(counts, lanes[MEAN_AGING + i], ZERO)

        # Sums and maxima, because "store this or what was there" becomes a masked store, which some
        # processors are slow at.
        peak_c = lanes[PEAK_HOT_SPOT_C + i]
        is_peak = counts & (hot_spot_c > peak_c)
        lanes[PEAK_HOT_SPOT_INDEX + i] += choose(is_peak, t - lanes[PEAK_HOT_SPOT_INDEX + i], ZERO)
        lanes[PEAK_HOT_SPOT_C + i] = larger(peak_c, choose(counts, hot_spot_c, LOWEST))
        lanes[PEAK_TOP_OIL_C + i] = larger(
            lanes[PEAK_TOP_OIL_C + i], choose(counts, lanes[TOP_OIL_C + i], LOWEST)
        )
        lanes[PEAK_LOAD_KVA + i] = larger(
            lanes[PEAK_LOAD_KVA + i], choose(counts, load_now_kva, LOWEST)
        )


@njit(nogil=True)
def _keep(record, lanes, t):  # type: ignore[no-untyped-def]
    """Write down what the interval brought to each unit."""
    for row, held in enumerate((TOP_OIL_C, HOT_SPOT_C, MEAN_AGING, COUNTS)):
        for i in range(record.shape[1]):
            record[row, i, t] = lanes[held + i]


def _read_only(dtype: Any, ndim: int) -> Any:
    """Type of an input: also arrays that may not be written to, such as those mapped from a file."""
    return types.Array(dtype, ndim, "C", readonly=True)


@_compiled(
    types.void(
        _read_only(types.float32, 2),
        _read_only(types.float32, 2),
        _read_only(types.int64, 1),
        types.float32[::1],
        types.float64[::1],
        types.float32[:, :, ::1],
        types.int64,
        types.float32,
        types.int64,
        types.int64,
    )
)
def _assess_group(  # type: ignore[no-untyped-def]
    load_kva,  # (n_unit, n_time), of all units
    air_temp_c,  # (n_station, n_time)
    station_index,  # (n_unit,)
    lanes,  # (n_row * LANES,), of the group; changed in place
    aging,  # (LANES,); added to
    record,  # (4, n_unit of the group, n_time) to be filled; (4, 0, 0) where nobody asks
    first_unit,
    hot_spot_limit_c,
    day,
    longest_hole,
):
    n_time = load_kva.shape[1]
    n_lane = min(LANES, load_kva.shape[0] - first_unit)
    load_tile = np.full((TILE, LANES), np.float32(np.nan))
    air_tile = np.full((TILE, LANES), np.float32(np.nan))
    for i in range(n_lane):
        if not abs(lanes[LAST_LOAD_KVA + i]) <= LARGEST:
            _begin(lanes, i, load_kva[first_unit + i], day)
    for tile_start in range(0, n_time, TILE):
        n_step = min(TILE, n_time - tile_start)
        for i in range(n_lane):
            station = station_index[first_unit + i]
            for step in range(n_step):
                load_tile[step, i] = load_kva[first_unit + i, tile_start + step]
                air_tile[step, i] = air_temp_c[station, tile_start + step]
        for step in range(n_step):
            t = np.float32(tile_start + step)
            for i in range(LANES):
                lanes[LOAD_KVA + i] = load_tile[step, i]
                lanes[AIR_TEMP_C + i] = air_tile[step, i]
            _set_goals(lanes)
            _correct_time_constant(lanes)
            _look_inside(lanes)
            _take_mean_aging(lanes)
            _advance(lanes, t)
            _count(lanes, t, hot_spot_limit_c, np.float32(day), np.float32(longest_hole))
            if record.shape[1]:
                _keep(record, lanes, tile_start + step)
        for i in range(LANES):
            aging[i] += lanes[AGING + i]
            lanes[AGING + i] = ZERO


def _rows(
    parameters: ThermalParameters,
    state: ThermalState,
    step_h: float,
    time_constant: TimeConstant,
) -> dict[int, ArrayLike]:
    """Return what each row holds at the start; those of the passes hold nothing yet."""
    p = parameters
    rows: dict[int, ArrayLike] = {
        RATED_KVA: p.rated_kva,
        PER_RATED_KVA: 1.0 / p.rated_kva,
        LOAD_LOSS_SHARE: p.loss_ratio / (p.loss_ratio + 1.0),
        NO_LOAD_LOSS_SHARE: 1.0 / (p.loss_ratio + 1.0),
        OIL_EXPONENT: p.oil_exponent,
        PER_OIL_EXPONENT: 1.0 / p.oil_exponent,
        WINDING_EXPONENT: p.winding_exponent,
        RATED_TOP_OIL_RISE_K: p.top_oil_rise_k,
        RATED_GRADIENT_K: p.hot_spot_gradient_k,
        STEP_PER_TIME_CONSTANT: -LOG2_E * step_h / p.top_oil_time_constant_h,
        CORRECTED: float(time_constant == "corrected"),
        WINDING_GAIN: -np.expm1(-step_h / p.winding_time_constant_h),
        REFERENCE_HOT_SPOT_C: p.reference_hot_spot_c,
        AGING_SLOPE: LOG2_E * ARRHENIUS_SLOPE_K / (p.reference_hot_spot_c + ABSOLUTE_ZERO_OFFSET_K),
        FIRST_LOAD: 0.0,
        TOP_OIL_RISE_PU: state.top_oil_rise_k / p.top_oil_rise_k,
        GRADIENT_PU: state.hot_spot_gradient_k / p.hot_spot_gradient_k,
        LAST_LOAD_KVA: state.last_load_pu * p.rated_kva,
        HOLE: np.rint(state.hole_h / step_h),
        WARM_UP_LEFT: np.rint(state.warm_up_left_h / step_h),
        COUNTED: 0.0,
        OVER_RATING: 0.0,
        OVER_HOT_SPOT_LIMIT: 0.0,
        PEAK_LOAD_KVA: -np.inf,
        PEAK_HOT_SPOT_C: -np.inf,
        PEAK_HOT_SPOT_INDEX: -1.0,
        PEAK_TOP_OIL_C: -np.inf,
        AGING: 0.0,
        **dict.fromkeys(range(LOAD_KVA, INSTANTS, LANES), 0.0),
    }
    time_h, weight = aging_nodes(step_h, p.winding_time_constant_h)
    for node in range(N_NODE):
        instant = INSTANTS + ROWS_PER_INSTANT * node
        rows[instant + TIME_SHARE] = time_h[node] / step_h
        rows[instant + WEIGHT] = weight[node]
        rows[instant + WINDING_DECAY] = np.exp(-time_h[node] / p.winding_time_constant_h)
        rows[instant + HOT_SPOT_THEN_C] = 0.0
    return rows


def _grouped(values: FloatArray) -> Float32Array:
    """Lay values of shape (n_unit, ...) out by group, unit last: (n_group, ..., LANES)."""
    n_group = -(-len(values) // LANES)
    padded = np.zeros((n_group * LANES, *values.shape[1:]), dtype=np.float32)
    padded[: len(values)] = values
    groups = padded.reshape(n_group, LANES, *values.shape[1:])
    return np.ascontiguousarray(np.moveaxis(groups, 1, -1))


def _figures(
    rows: dict[int, FloatArray],
    aging: FloatArray,
    parameters: ThermalParameters,
    step_h: float,
) -> FleetFigures:
    """Return the figures in their units from what the rows of the groups hold at the end."""
    some = rows[COUNTED] > 0.0
    known = np.isfinite(rows[LAST_LOAD_KVA])

    def peak(values: FloatArray) -> FloatArray:
        return np.where(some, values, np.nan)

    return FleetFigures(
        peak_load_pu=peak(rows[PEAK_LOAD_KVA] / parameters.rated_kva),
        peak_hot_spot_c=peak(rows[PEAK_HOT_SPOT_C]),
        peak_hot_spot_index=rows[PEAK_HOT_SPOT_INDEX].astype(np.int64),
        peak_top_oil_c=peak(rows[PEAK_TOP_OIL_C]),
        hours_over_rating=rows[OVER_RATING] * step_h,
        hours_over_hot_spot_limit=rows[OVER_HOT_SPOT_LIMIT] * step_h,
        aging_hours=aging * step_h,
        counted_hours=rows[COUNTED] * step_h,
        state=ThermalState(
            np.where(known, rows[TOP_OIL_RISE_PU] * parameters.top_oil_rise_k, np.nan),
            np.where(known, rows[GRADIENT_PU] * parameters.hot_spot_gradient_k, np.nan),
            rows[LAST_LOAD_KVA] / parameters.rated_kva,
            rows[HOLE] * step_h,
            rows[WARM_UP_LEFT] * step_h,
        ),
    )


def _checked_stations(
    air_temp_c: Float32Array,
    station_index: NDArray[np.integer[Any]],
    n_unit: int,
    n_time: int,
) -> NDArray[np.int64]:
    """Return the station of each unit; refuse what would read outside the air temperatures."""
    if air_temp_c.ndim != 2 or air_temp_c.shape[1] != n_time:
        raise ModelRangeError(
            f"air_temp_c = array of shape {air_temp_c.shape} is not one row a station; "
            f"allowed (n_station, {n_time}). Give one temperature for each interval of the loads."
        )
    stations = np.ascontiguousarray(station_index, dtype=np.int64)
    if stations.shape != (n_unit,):
        raise ModelRangeError(
            f"station_index = array of shape {stations.shape} is not one station a unit; "
            f"allowed ({n_unit},). Give the row of the air temperatures for each unit."
        )
    n_station = len(air_temp_c)
    outside = stations[(stations < 0) | (stations >= n_station)]
    if outside.size:
        raise ModelRangeError(
            f"station_index = {outside[0]} is no row of the air temperatures; "
            f"allowed 0 to {n_station - 1}. Give the row of the air temperatures for each unit."
        )
    return stations


def assess_fleet(
    load_kva: Float32Array,
    air_temp_c: Float32Array,
    station_index: NDArray[np.integer[Any]],
    parameters: ThermalParameters,
    step_h: float,
    *,
    hot_spot_limit_c: float,
    time_constant: TimeConstant = "corrected",
    state: ThermalState | None = None,
    threads: int | None = None,
) -> FleetFigures:
    """Step a fleet through its loads and add up what each unit went through.

    The same figures as `c57_91.simulate` and `c57_91.summarise`, which say what they mean, to 0.001
    °C and 0.01 % of the aging hours.

    Parameters
    ----------
    load_kva : ndarray of float32, shape (n_unit, n_time), C-contiguous
        Mean load of each interval, a magnitude. What is not finite is a gap. [kVA]
    air_temp_c : ndarray of float32, shape (n_station, n_time), C-contiguous
        Ambient temperature at each weather station; gaps likewise. [°C]
    station_index : ndarray of int, shape (n_unit,)
        Row of `air_temp_c` that holds for each unit.
    parameters : ThermalParameters
        The units.
    step_h : float
        Length of every interval. [h]
    hot_spot_limit_c : float
        Limit that `hours_over_hot_spot_limit` counts against. [°C]
    time_constant : {"corrected", "rated"}
        Whether the top-oil time constant is corrected for each interval, or kept as at rated load.
    state : ThermalState, optional
        Where an earlier run ended; without it, every series warms up first.
    threads : int, optional
        Threads to work with; default one a processor.

    Returns
    -------
    FleetFigures
        Arrays of shape (n_unit,).

    Raises
    ------
    ModelRangeError
        If the shapes do not fit each other, or the interval length is not a part of a day.
    """
    run = _run(
        load_kva,
        air_temp_c,
        station_index,
        parameters,
        step_h,
        hot_spot_limit_c,
        time_constant,
        state,
        threads,
        keep=False,
    )
    return run[0]


def trace_fleet(
    load_kva: Float32Array,
    air_temp_c: Float32Array,
    station_index: NDArray[np.integer[Any]],
    parameters: ThermalParameters,
    step_h: float,
    *,
    time_constant: TimeConstant = "corrected",
    state: ThermalState | None = None,
) -> Trace:
    """Step units through their loads and keep every interval.

    What `c57_91.simulate` gives, to 0.001 °C, in a fraction of a millisecond a unit-year. Parameters
    and errors are those of `assess_fleet`.

    Returns
    -------
    Trace
        Arrays of shape (n_unit, n_time).
    """
    figures, record = _run(
        load_kva,
        air_temp_c,
        station_index,
        parameters,
        step_h,
        np.inf,
        time_constant,
        state,
        None,
        keep=True,
    )
    air = np.asarray(air_temp_c)[np.asarray(station_index)]
    known = np.isfinite(load_kva) & np.isfinite(air)
    top_oil_c, hot_spot_c, aging_factor = (
        np.where(known, values, np.nan).astype(np.float64) for values in record[:3]
    )
    return Trace(top_oil_c, hot_spot_c, aging_factor, record[3] > 0.0, figures.state)


def _run(
    load_kva: Float32Array,
    air_temp_c: Float32Array,
    station_index: NDArray[np.integer[Any]],
    parameters: ThermalParameters,
    step_h: float,
    hot_spot_limit_c: float,
    time_constant: TimeConstant,
    state: ThermalState | None,
    threads: int | None,
    *,
    keep: bool,
) -> tuple[FleetFigures, Float32Array]:
    """Run all groups; return the figures, and the record of shape (4, n_unit, n_time) to keep."""
    n_unit, n_time = checked_shape(load_kva, parameters)
    before = checked_state(state, n_unit)
    stations = _checked_stations(air_temp_c, station_index, n_unit, n_time)
    loads = np.ascontiguousarray(load_kva, dtype=np.float32)
    air = np.ascontiguousarray(air_temp_c, dtype=np.float32)

    rows = _rows(parameters, before, checked_step(step_h), time_constant)
    lanes = _grouped(np.stack([np.broadcast_to(rows[row], n_unit) for row in sorted(rows)], axis=1))
    aging = np.zeros((len(lanes), LANES))
    record = np.empty((4, n_unit, n_time) if keep else (4, 0, 0), dtype=np.float32)

    def assess_group(group: int) -> None:
        own = np.ascontiguousarray(record[:, group * LANES : (group + 1) * LANES])
        _assess_group(
            loads,
            air,
            stations,
            lanes[group].reshape(-1),
            aging[group],
            own,
            group * LANES,
            hot_spot_limit_c,
            intervals_in(WARM_UP_H, step_h),
            intervals_in(LONGEST_CARRIED_HOLE_H, step_h),
        )
        record[:, group * LANES : (group + 1) * LANES] = own

    with ThreadPoolExecutor(threads or os.cpu_count()) as pool:
        list(pool.map(assess_group, range(len(lanes))))

    figures = _figures(
        {row: lanes[:, row // LANES].reshape(-1)[:n_unit].astype(np.float64) for row in REPORTED},
        aging.reshape(-1)[:n_unit],
        parameters,
        step_h,
    )
    return figures, record
