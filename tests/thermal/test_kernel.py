"""The fleet kernel against the readable form, and against itself."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numba import njit
from numpy.testing import assert_allclose, assert_array_equal

from tracker.errors import ModelRangeError
from tracker.thermal import FleetFigures, ThermalState, _polynomials, simulate, summarise
from tracker.thermal.kernel import LANES, assess_fleet, trace_fleet

LIMIT_C = 120.0
STEPS_H = [1 / 12, 1 / 6, 0.25, 1 / 3, 0.5, 1.0]


def assess(fleet, step_h: float, **options) -> FleetFigures:
    """Figures by the kernel."""
    return assess_fleet(
        fleet.load_kva,
        fleet.air_temp_c,
        fleet.station_index,
        fleet.parameters,
        step_h,
        hot_spot_limit_c=LIMIT_C,
        **options,
    )


def read(fleet, step_h: float, **options) -> FleetFigures:
    """Figures by the readable form."""
    trace = simulate(fleet.load_kva, fleet.air_at_unit_c, fleet.parameters, step_h, **options)
    return summarise(trace, fleet.load_kva, fleet.parameters, step_h, LIMIT_C)


def assert_same_figures(kernel: FleetFigures, readable: FleetFigures) -> None:
    """To 0.001 °C, 0.01 % of the aging, and the very same hours."""
    assert_array_equal(kernel.counted_hours, readable.counted_hours)
    assert_array_equal(kernel.hours_over_rating, readable.hours_over_rating)
    assert_allclose(kernel.peak_load_pu, readable.peak_load_pu, rtol=1e-6)
    assert_allclose(kernel.peak_hot_spot_c, readable.peak_hot_spot_c, rtol=0, atol=1e-3)
    assert_allclose(kernel.peak_top_oil_c, readable.peak_top_oil_c, rtol=0, atol=1e-3)
    assert_allclose(kernel.aging_hours, readable.aging_hours, rtol=1e-4)
    ours, theirs = kernel.state, readable.state
    assert_allclose(ours.top_oil_rise_k, theirs.top_oil_rise_k, rtol=0, atol=1e-3)
    assert_allclose(ours.hot_spot_gradient_k, theirs.hot_spot_gradient_k, rtol=0, atol=1e-3)
    assert_allclose(ours.last_load_pu, theirs.last_load_pu, rtol=1e-6)
    assert_array_equal(ours.hole_h, theirs.hole_h)
    assert_array_equal(ours.warm_up_left_h, theirs.warm_up_left_h)


def assert_same_bits(one: FleetFigures, other: FleetFigures) -> None:
    """Every figure, NaN included."""
    for name in FleetFigures.__slots__:
        if name != "state":
            assert_array_equal(getattr(one, name), getattr(other, name), err_msg=name)
    for name in ThermalState.__slots__:
        assert_array_equal(getattr(one.state, name), getattr(other.state, name), err_msg=name)


# --- Against the readable form


@settings(max_examples=60, deadline=None)
@given(
    st.integers(1, 2 * LANES + 1),
    st.integers(1, 400),
    st.sampled_from(STEPS_H),
    st.integers(0, 2**32 - 1),
    st.sampled_from(["corrected", "rated"]),
    st.floats(0.5, 1.6),
)
def test_equals_the_readable_form(
    make_fleet: Callable,
    n_unit: int,
    n_time: int,
    step_h: float,
    seed: int,
    time_constant: str,
    peak_pu: float,
) -> None:
    """Random fleets with holes, late starts, infinities, zeros and missing air."""
    fleet = make_fleet(n_unit, n_time, step_h, seed, peak_pu=peak_pu)
    kernel = assess(fleet, step_h, time_constant=time_constant)
    readable = read(fleet, step_h, time_constant=time_constant)
    assert_same_figures(kernel, readable)


@pytest.mark.parametrize("step_h", STEPS_H)
@pytest.mark.parametrize("time_constant", ["corrected", "rated"])
def test_equals_the_readable_form_over_weeks(
    make_fleet: Callable, step_h: float, time_constant: str
) -> None:
    """Rounding does not pile up, and the peak falls in the same interval."""
    fleet = make_fleet(LANES, round(21 * 24 / step_h), step_h, seed=11)
    kernel = assess(fleet, step_h, time_constant=time_constant)
    readable = read(fleet, step_h, time_constant=time_constant)
    assert_same_figures(kernel, readable)
    assert_array_equal(kernel.peak_hot_spot_index, readable.peak_hot_spot_index)
    assert_array_equal(kernel.hours_over_hot_spot_limit, readable.hours_over_hot_spot_limit)
    assert kernel.hours_over_hot_spot_limit.sum() > 0


@settings(max_examples=20, deadline=None)
@given(
    st.integers(1, LANES + 1),
    st.integers(1, 300),
    st.sampled_from(STEPS_H),
    st.integers(0, 2**32 - 1),
    st.sampled_from(["corrected", "rated"]),
)
def test_trace_equals_the_readable_form(
    make_fleet: Callable, n_unit: int, n_time: int, step_h: float, seed: int, time_constant: str
) -> None:
    """What a person sees of one unit is what the reference says, gaps and warm-up included."""
    fleet = make_fleet(n_unit, n_time, step_h, seed)
    kernel = trace_fleet(
        fleet.load_kva,
        fleet.air_temp_c,
        fleet.station_index,
        fleet.parameters,
        step_h,
        time_constant=time_constant,
    )
    readable = simulate(
        fleet.load_kva, fleet.air_at_unit_c, fleet.parameters, step_h, time_constant=time_constant
    )
    assert_array_equal(kernel.counted, readable.counted)
    assert_allclose(kernel.top_oil_c, readable.top_oil_c, rtol=0, atol=1e-3)
    assert_allclose(kernel.hot_spot_c, readable.hot_spot_c, rtol=0, atol=1e-3)
    assert_allclose(kernel.aging_factor, readable.aging_factor, rtol=1e-4, atol=1e-12)


@pytest.mark.parametrize("load_pu", [0.0, 1e-6, 0.5, 1.0, 3.0, 10.0])
@pytest.mark.parametrize("air_c", [-40.0, 0.0, 50.0])
@pytest.mark.parametrize("time_constant", ["corrected", "rated"])
def test_holds_at_extreme_loads(
    make_fleet: Callable, load_pu: float, air_c: float, time_constant: str
) -> None:
    """From idle in deep frost to ten times the rating; beyond any sense, but never NaN."""
    fleet = make_fleet(10, 72, 1.0, seed=5, gaps=False)
    rated_kva = fleet.parameters.rated_kva.astype(np.float32)
    fleet.load_kva[:, :36] = (0.5 * rated_kva)[:, np.newaxis]
    fleet.load_kva[:, 36:] = np.float32(load_pu) * rated_kva[:, np.newaxis]
    fleet.air_temp_c[:] = air_c
    kernel = assess(fleet, 1.0, time_constant=time_constant)
    readable = read(fleet, 1.0, time_constant=time_constant)
    assert_allclose(kernel.peak_hot_spot_c, readable.peak_hot_spot_c, rtol=1e-6, atol=1e-3)
    assert_allclose(kernel.aging_hours, readable.aging_hours, rtol=1e-4)
    assert_array_equal(kernel.hours_over_rating, readable.hours_over_rating)


def test_constant_load_stays_where_it_is(make_fleet: Callable) -> None:
    """At a steady load the oil meets its goal: the 0/0 of the time constant, for weeks."""
    fleet = make_fleet(LANES, 500, 1.0, seed=5, gaps=False)
    fleet.load_kva[:] = 0.9 * fleet.parameters.rated_kva[:, np.newaxis]
    fleet.air_temp_c[:] = 30.0
    kernel, readable = assess(fleet, 1.0), read(fleet, 1.0)
    assert_allclose(kernel.peak_hot_spot_c, readable.peak_hot_spot_c, rtol=0, atol=1e-4)
    assert_allclose(kernel.aging_hours, readable.aging_hours, rtol=1e-5)


def test_load_at_the_rating_is_not_over_it(make_fleet: Callable) -> None:
    """K = 1 is within the rating, whatever rounding a reciprocal would bring."""
    fleet = make_fleet(8, 48, 1.0, seed=5, gaps=False)
    fleet.load_kva[:] = fleet.parameters.rated_kva[:, np.newaxis]
    figures = assess(fleet, 1.0)
    assert_array_equal(figures.hours_over_rating, 0.0)
    assert_array_equal(figures.peak_load_pu, 1.0)
    fleet.load_kva[:] = np.nextafter(fleet.load_kva, np.float32(np.inf))
    assert_array_equal(assess(fleet, 1.0).hours_over_rating, 24.0)


def test_first_of_equal_peaks_is_named(make_fleet: Callable) -> None:
    """The same day repeated peaks on its first counted repetition, not on a later one."""
    fleet = make_fleet(4, 30, 1.0, seed=5, gaps=False)
    fleet.load_kva[:] = 0.0
    fleet.air_temp_c[:] = 10.0
    fleet.air_temp_c[:, [3, 26, 28]] = 40.0
    assert_array_equal(assess(fleet, 1.0).peak_hot_spot_index, 26)


# --- Against itself


def test_same_bits_whatever_the_threads_and_the_company(make_fleet: Callable) -> None:
    """Threads, the order of the units and who shares a group change nothing at all."""
    fleet = make_fleet(5 * LANES + 17, 300, 0.5, seed=1)
    whole = assess(fleet, 0.5, threads=1)
    assert_same_bits(assess(fleet, 0.5, threads=4), whole)
    order = np.random.default_rng(2).permutation(fleet.parameters.n_unit)
    shuffled = assess(fleet.take(order), 0.5, threads=3)
    for name in ("peak_hot_spot_c", "aging_hours", "hours_over_rating", "peak_hot_spot_index"):
        assert_array_equal(getattr(shuffled, name), getattr(whole, name)[order])
    alone = assess(fleet.take(np.array([77])), 0.5)
    assert alone.aging_hours == whole.aging_hours[77]
    assert alone.peak_hot_spot_c == whole.peak_hot_spot_c[77]


@pytest.mark.parametrize("time_constant", ["corrected", "rated"])
@pytest.mark.parametrize("cut", [24, 100, 131])
def test_two_runs_make_one(make_fleet: Callable, time_constant: str, cut: int) -> None:
    """A run cut anywhere and continued from its state adds up to one run in one piece."""
    fleet = make_fleet(90, 240, 1.0, seed=9)
    late = np.isnan(fleet.load_kva[:, 0])
    fleet.load_kva[late] = np.nan_to_num(fleet.load_kva[late], nan=5.0)
    whole = assess(fleet, 1.0, time_constant=time_constant)
    first = assess(fleet.between(0, cut), 1.0, time_constant=time_constant)
    second = assess(fleet.between(cut, 240), 1.0, time_constant=time_constant, state=first.state)
    for name in ThermalState.__slots__:
        assert_array_equal(getattr(second.state, name), getattr(whole.state, name))
    assert_array_equal(first.counted_hours + second.counted_hours, whole.counted_hours)
    assert_array_equal(
        np.fmax(first.peak_hot_spot_c, second.peak_hot_spot_c), whole.peak_hot_spot_c
    )
    assert_allclose(first.aging_hours + second.aging_hours, whole.aging_hours, rtol=1e-6)


def test_readable_form_continues_from_the_state_of_the_kernel(make_fleet: Callable) -> None:
    """A trace may start where a stored assessment ended."""
    fleet = make_fleet(30, 240, 1.0, seed=4)
    first = assess(fleet.between(0, 100), 1.0)
    rest = fleet.between(100, 240)
    assert_same_figures(assess(rest, 1.0, state=first.state), read(rest, 1.0, state=first.state))


def test_takes_arrays_that_may_not_be_written_to(make_fleet: Callable) -> None:
    """Loads mapped from a file are read-only; they give the same bits."""
    fleet = make_fleet(10, 100, 1.0, seed=4)
    free = assess(fleet, 1.0)
    fleet.load_kva.flags.writeable = False
    fleet.air_temp_c.flags.writeable = False
    assert_same_bits(assess(fleet, 1.0), free)


def test_wrong_stations_and_shapes_are_named(make_fleet: Callable) -> None:
    """The compiled loop checks no bounds: what would read elsewhere is refused before."""
    fleet = make_fleet(10, 100, 1.0, seed=4)
    fleet.station_index[3] = 3
    with pytest.raises(ModelRangeError, match="station_index = 3 is no row"):
        assess(fleet, 1.0)
    with pytest.raises(ModelRangeError, match="station_index = array of shape"):
        assess_fleet(
            fleet.load_kva,
            fleet.air_temp_c,
            fleet.station_index[:5],
            fleet.parameters,
            1.0,
            hot_spot_limit_c=LIMIT_C,
        )
    with pytest.raises(ModelRangeError, match="air_temp_c = array of shape"):
        assess_fleet(
            fleet.load_kva,
            fleet.air_temp_c[:, :50],
            fleet.station_index,
            fleet.parameters,
            1.0,
            hot_spot_limit_c=LIMIT_C,
        )
    with pytest.raises(ModelRangeError, match="state = 2 units"):
        assess(fleet, 1.0, state=ThermalState.unknown(2))


# --- The polynomials


@njit
def apply_exp2(x, out):
    for i in range(len(x)):
        out[i] = _polynomials.exp2(x[i])


@njit
def apply_exp2_less_1(x, out):
    for i in range(len(x)):
        out[i] = _polynomials.exp2_less_1(x[i])


@njit
def apply_log2(x, out):
    for i in range(len(x)):
        out[i] = _polynomials.log2(x[i])


def by(function: Callable, x: np.ndarray) -> np.ndarray:
    """Values of a compiled function, in float64."""
    out = np.empty_like(x)
    function(x, out)
    return out.astype(np.float64)


def test_powers_of_two() -> None:
    """Within two units of the last place of a float32, and next to nothing far below 0."""
    x = np.linspace(-120.0, 120.0, 1_000_001).astype(np.float32)
    assert_allclose(by(apply_exp2, x), np.exp2(x.astype(np.float64)), rtol=2.4e-7)
    assert by(apply_exp2, np.array([-1e30], np.float32)) < 1e-37


def test_powers_of_two_less_1() -> None:
    """As exact relative to itself however near to 0: a slow oil moves little in five minutes."""
    x = -np.geomspace(1e-6, 30.0, 1_000_001).astype(np.float32)
    exact = np.expm1(x.astype(np.float64) * math.log(2.0))
    assert_allclose(by(apply_exp2_less_1, x), exact, rtol=2.4e-7)


def test_logarithms_to_base_two() -> None:
    """Within two units of the last place, also relative to itself next to 1; 0 is far down."""
    x = np.concatenate([np.geomspace(1e-30, 1e30, 500_001), np.linspace(0.99, 1.01, 500_001)])
    x = x.astype(np.float32)
    assert_allclose(by(apply_log2, x), np.log2(x.astype(np.float64)), rtol=2.4e-7, atol=1e-12)
    assert by(apply_log2, np.zeros(1, np.float32)) < -120.0
