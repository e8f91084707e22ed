"""The readable form of clause 7 against tables, the differential equation, and the counting rules."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.integrate import solve_ivp

from tracker.errors import ModelRangeError
from tracker.thermal import (
    ThermalParameters,
    ThermalState,
    aging_acceleration_factor,
    corrected_time_constant,
    exponential_step,
    simulate,
    steady_state,
    summarise,
    ultimate_top_oil_rise,
)

STEPS_H = [1 / 12, 1 / 6, 0.25, 1 / 3, 0.5, 1.0]


# --- Formulas

# Steady state at 30 °C ambient for R 5, 53 K, 27 K, n = m = 0.8: computed by other means from the
# equations of clause 7, not published. K, top oil, hot spot, F_AA.
STEADY = [
    (0.5, 54.18, 63.09, 0.004226),
    (0.75, 66.87, 83.91, 0.05713),
    (1.0, 83.00, 110.00, 1.0000),
    (1.25, 102.08, 140.67, 18.24),
    (1.5, 123.81, 175.47, 304.1),
    (2.0, 174.39, 256.24, 50_100.0),
]


@pytest.mark.parametrize(("load_pu", "top_oil_c", "hot_spot_c", "factor"), STEADY)
def test_steady_state(
    pole_unit: ThermalParameters,
    load_pu: float,
    top_oil_c: float,
    hot_spot_c: float,
    factor: float,
) -> None:
    """A load held for days, to half the last digit of the table."""
    rises = steady_state(load_pu, pole_unit)
    assert_allclose(30.0 + rises.top_oil_rise_k, top_oil_c, rtol=0, atol=0.005)
    assert_allclose(30.0 + rises.hot_spot_rise_k, hot_spot_c, rtol=0, atol=0.005)
    assert_allclose(aging_acceleration_factor(30.0 + rises.hot_spot_rise_k), factor, rtol=0.5e-3)


# Corrected time constants for tau_R 6 h: computed by other means from the equation of clause 7.
@pytest.mark.parametrize(
    ("from_pu", "to_pu", "time_constant_h"),
    [
        (0.0, 1.0, 5.4828),
        (0.5, 1.0, 5.2198),
        (1.0, 2.0, 4.1383),
        (1.5, 0.5, 4.7296),
        (0.5, 1.5, 4.7296),
        (1.0, 1.0, 4.8),
    ],
)
def test_corrected_time_constant(from_pu: float, to_pu: float, time_constant_h: float) -> None:
    """The step from one steady state to another; no step has the limit n tau_R."""
    initial_k, ultimate_k = ultimate_top_oil_rise([from_pu, to_pu], 53.0, 5.0, 0.8)
    ours = corrected_time_constant(ultimate_k, initial_k, 53.0, 6.0, 0.8)
    assert_allclose(ours, time_constant_h, rtol=0, atol=0.5e-4)


@pytest.mark.parametrize("oil_exponent", [0.8, 0.9, 1.0])
def test_time_constant_passes_its_limit_smoothly(oil_exponent: float) -> None:
    """Around the 0/0 the quotient and its limit meet: no jump where one takes over from the other."""
    near_k = 40.0 + 53.0 * np.geomspace(1e-8, 1e-3, 60) * np.array([[1.0], [-1.0]])
    time_constant_h = corrected_time_constant(near_k, 40.0, 53.0, 6.0, oil_exponent)
    at_limit_h = 6.0 * oil_exponent * (40.0 / 53.0) ** (1.0 - 1.0 / oil_exponent)
    slope = np.abs(near_k - 40.0) / 53.0  # of the quotient, about 0.2/pu
    assert np.all(np.abs(time_constant_h / at_limit_h - 1.0) <= 0.3 * slope + 1e-9)


# Step from steady state at 0.5 pu to 1.5 pu, tau_R 6 h, tau_w 5 min: computed by other means, with
# the time constant of the whole step. h, top oil, hot spot.
@pytest.mark.parametrize(
    ("time_h", "top_oil_c", "hot_spot_c"),
    [(1.0, 67.45, 119.11), (4.0, 93.92, 145.58), (8.0, 110.98, 162.64), (24.0, 123.38, 175.03)],
)
def test_overload_step(
    pole_unit: ThermalParameters, time_h: float, top_oil_c: float, hot_spot_c: float
) -> None:
    """Oil follows in hours, the winding in minutes."""
    start, goal = steady_state(0.5, pole_unit), steady_state(1.5, pole_unit)
    tau_h = corrected_time_constant(goal.top_oil_rise_k, start.top_oil_rise_k, 53.0, 6.0, 0.8)
    oil_k = exponential_step(goal.top_oil_rise_k, start.top_oil_rise_k, time_h, tau_h)
    gradient_k = exponential_step(
        goal.hot_spot_gradient_k, start.hot_spot_gradient_k, time_h, 1 / 12
    )
    assert_allclose(30.0 + oil_k, top_oil_c, rtol=0, atol=0.005)
    assert_allclose(30.0 + oil_k + gradient_k, hot_spot_c, rtol=0, atol=0.005)


# The same with the rated time constant, which steps of any length must give: computed.
@pytest.mark.parametrize("step_h", STEPS_H)
def test_overload_in_steps_with_rated_time_constant(
    pole_unit: ThermalParameters, step_h: float
) -> None:
    """With a constant time constant the temperatures do not depend on the interval length."""
    per_hour = round(1 / step_h)
    load_kva = np.repeat([25.0, 75.0], [24 * per_hour, 8 * per_hour])[np.newaxis]
    trace = simulate(load_kva, np.array(30.0), pole_unit, step_h, time_constant="rated")
    at_h = (24 + np.array([1, 8])) * per_hour - 1
    assert_allclose(trace.top_oil_c[0, at_h], [64.87, 105.46], rtol=0, atol=0.005)
    assert_allclose(trace.hot_spot_c[0, at_h], [116.53, 157.11], rtol=0, atol=0.005)


# --- Stepping against the differential equation


def summer_cycle_pu(step_h: float, days: int) -> np.ndarray:
    """An evening peak of 1.3 pu over a base of 0.5, as hourly means held over their hour."""
    hour = np.arange(24)
    hourly = 0.5 + 0.8 * np.exp(-(((hour - 17.0) / 3.5) ** 2))
    return np.tile(np.repeat(hourly, round(1 / step_h)), days)


def top_oil_by_ode(unit: ThermalParameters, load_pu: np.ndarray, start_k: float) -> np.ndarray:
    """Solve tau_R dTO/dt = TO_R [(K²R + 1)/(R + 1) - (TO/TO_R)^(1/n)], hour by hour.

    As the interval shrinks, the corrected step becomes this equation; an independent solver.
    """
    rise_k = [start_k]
    for pu in load_pu:
        losses_pu = (pu**2 * 5.0 + 1.0) / 6.0
        solution = solve_ivp(
            lambda _, y, losses_pu=losses_pu: 53.0 / 6.0 * (losses_pu - (y / 53.0) ** 1.25),
            (0.0, 1.0),
            [rise_k[-1]],
            rtol=1e-9,
            atol=1e-9,
        )
        rise_k.append(solution.y[0, -1])
    return np.array(rise_k[1:])


def test_stepping_converges_to_the_differential_equation(pole_unit: ThermalParameters) -> None:
    """Fine steps meet the equation, at first order; hourly ones stay within 0.3 °C of it."""
    hourly_pu = summer_cycle_pu(1.0, days=3)
    start_k = float(
        steady_state(np.sqrt(np.mean(hourly_pu[:24] ** 2)), pole_unit).top_oil_rise_k[0]
    )
    exact_c = 30.0 + top_oil_by_ode(pole_unit, hourly_pu, start_k)
    off_k = {}
    for step_h in (1.0, 1 / 30, 1 / 120):
        load_kva = 50.0 * summer_cycle_pu(step_h, days=3)[np.newaxis]
        trace = simulate(load_kva, np.array(30.0), pole_unit, step_h)
        at_hours = trace.top_oil_c[0, round(1 / step_h) - 1 :: round(1 / step_h)]
        off_k[step_h] = np.abs(at_hours - exact_c).max()
    assert off_k[1.0] < 0.3
    assert off_k[1 / 120] < 0.003
    assert_allclose(off_k[1 / 30] / off_k[1 / 120], 4.0, rtol=0.1)


@pytest.mark.parametrize("step_h", STEPS_H)
@pytest.mark.parametrize("time_constant", ["corrected", "rated"])
def test_aging_is_the_integral_over_each_interval(
    pole_unit: ThermalParameters, step_h: float, time_constant: str
) -> None:
    """Within 0.5 % of Simpson's rule over 60 parts of each interval of a three-day cycle."""
    load_kva = 74.0 * summer_cycle_pu(step_h, days=3)[np.newaxis]
    trace = simulate(load_kva, np.array(30.0), pole_unit, step_h, time_constant=time_constant)
    assert 170.0 < trace.hot_spot_c.max() < 200.0
    oil_k = trace.top_oil_c[0] - 30.0
    gradient_k = trace.hot_spot_c[0] - trace.top_oil_c[0]
    by_parts = 0.0
    for t in range(round(24 / step_h), load_kva.shape[1]):
        goal = steady_state(load_kva[0, t] / 50.0, pole_unit)
        tau_h = np.array([6.0])
        if time_constant == "corrected":
            tau_h = corrected_time_constant(goal.top_oil_rise_k, oil_k[t - 1], 53.0, 6.0, 0.8)
        fine_h = np.linspace(0.0, step_h, 61)
        inside_c = (
            30.0
            + exponential_step(goal.top_oil_rise_k, oil_k[t - 1], fine_h, tau_h)
            + exponential_step(goal.hot_spot_gradient_k, gradient_k[t - 1], fine_h, 1 / 12)
        )
        factor = aging_acceleration_factor(inside_c)
        by_parts += (
            factor[0] + 4 * factor[1::2].sum() + 2 * factor[2:-1:2].sum() + factor[-1]
        ) / 180
    figures = summarise(trace, load_kva, pole_unit, step_h, 140.0)
    assert_allclose(figures.aging_hours, by_parts * step_h, rtol=0.005)


# --- Which intervals count


def counted_hours(
    unit: ThermalParameters, load_kva: np.ndarray, air_temp_c: np.ndarray | float = 30.0
) -> list[int]:
    """Indices of the counted hours of one unit."""
    trace = simulate(load_kva[np.newaxis], np.asarray(air_temp_c), unit, 1.0)
    return np.flatnonzero(trace.counted[0]).tolist()


def test_first_day_warms_up(pole_unit: ThermalParameters) -> None:
    """The first 24 h count in no figure; the 25th does."""
    assert counted_hours(pole_unit, np.full(30, 40.0)) == list(range(24, 30))


def test_series_begins_at_its_first_known_load(pole_unit: ThermalParameters) -> None:
    """Leading gaps count nowhere, and the warm-up starts after them."""
    load_kva = np.full(40, 40.0)
    load_kva[:10] = np.nan
    assert counted_hours(pole_unit, load_kva) == list(range(34, 40))


def test_starts_in_the_steady_state_of_the_rms_load(pole_unit: ThermalParameters) -> None:
    """Over the known loads among the 24 h from the first one; what comes later does not matter."""
    load_kva = np.full((1, 30), 90.0)
    load_kva[0, :24] = np.tile([30.0, 60.0, np.nan], 8)
    trace = simulate(load_kva, np.array(30.0), pole_unit, 1.0, time_constant="rated")
    start = steady_state(np.sqrt((30.0**2 + 60.0**2) / 2) / 50.0, pole_unit)
    goal = steady_state(30.0 / 50.0, pole_unit)
    after_1_h = exponential_step(goal.top_oil_rise_k, start.top_oil_rise_k, 1.0, 6.0)
    assert_allclose(trace.top_oil_c[0, 0] - 30.0, after_1_h, rtol=1e-12)


def test_gap_counts_in_no_figure(pole_unit: ThermalParameters) -> None:
    """Neither an hour without load nor one without air temperature; the next hour counts again."""
    load_kva, air_temp_c = np.full(30, 40.0), np.full(30, 30.0)
    load_kva[25], air_temp_c[27], load_kva[28] = np.nan, np.nan, np.inf
    assert counted_hours(pole_unit, load_kva, air_temp_c) == [24, 26, 29]
    trace = simulate(load_kva[np.newaxis], air_temp_c, pole_unit, 1.0)
    assert np.isnan(trace.hot_spot_c[0, [25, 27, 28]]).all()
    assert np.isnan(trace.aging_factor[0, [25, 27, 28]]).all()


@pytest.mark.parametrize(("hole_h", "first_counted"), [(24, 74), (25, 99)])
def test_long_hole_warms_up_anew(
    pole_unit: ThermalParameters, hole_h: int, first_counted: int
) -> None:
    """A hole of a day is bridged; a longer one costs the next 24 h."""
    load_kva = np.full(120, 40.0)
    load_kva[50 : 50 + hole_h] = np.nan
    counted = counted_hours(pole_unit, load_kva)
    assert counted == [*range(24, 50), *range(first_counted, 120)]


def test_hole_is_carried_with_the_last_load(pole_unit: ThermalParameters) -> None:
    """The state after a hole is as if the last load had stayed."""
    load_kva = np.full((1, 60), 40.0)
    load_kva[0, 40:] = 70.0
    with_hole = load_kva.copy()
    with_hole[0, 41:50] = np.nan
    whole = simulate(load_kva, np.array(30.0), pole_unit, 1.0)
    holed = simulate(with_hole, np.array(30.0), pole_unit, 1.0)
    assert_array_equal(holed.hot_spot_c[0, 50:], whole.hot_spot_c[0, 50:])


def test_missing_air_does_not_stop_the_load(pole_unit: ThermalParameters) -> None:
    """Rises do not depend on the air: they go on with the load that is known."""
    load_kva = np.linspace(20.0, 70.0, 60)[np.newaxis]
    air_temp_c = np.full(60, 30.0)
    air_temp_c[40:45] = np.nan
    whole = simulate(load_kva, np.array(30.0), pole_unit, 1.0)
    holed = simulate(load_kva, air_temp_c, pole_unit, 1.0)
    assert_array_equal(holed.hot_spot_c[0, 45:], whole.hot_spot_c[0, 45:])


def test_nothing_counted_gives_no_peak(pole_unit: ThermalParameters) -> None:
    """A unit without any load has no peak, no index and no hours, and stays unknown."""
    load_kva = np.full((1, 48), np.nan)
    trace = simulate(load_kva, np.array(30.0), pole_unit, 1.0)
    figures = summarise(trace, load_kva, pole_unit, 1.0, 140.0)
    assert np.isnan([figures.peak_load_pu, figures.peak_hot_spot_c, figures.peak_top_oil_c]).all()
    assert figures.peak_hot_spot_index == [-1]
    assert figures.counted_hours == figures.aging_hours == [0.0]
    assert np.isnan(figures.state.last_load_pu).all()


def test_figures_of_a_known_day(pole_unit: ThermalParameters) -> None:
    """Peaks, first of equals, hours with K > 1 and hours that end over the limit."""
    load_kva = np.full((1, 72), 50.0)
    load_kva[0, 30:32] = 80.0
    trace = simulate(load_kva, np.array(30.0), pole_unit, 1.0)
    figures = summarise(trace, load_kva, pole_unit, 1.0, 109.0)
    assert figures.peak_load_pu == [1.6]
    assert figures.peak_hot_spot_index == [31]
    assert figures.peak_hot_spot_c == trace.hot_spot_c[0, 31]
    assert figures.hours_over_rating == [2.0]  # K = 1 is not over the rating
    assert figures.hours_over_hot_spot_limit == [48.0]
    assert figures.counted_hours == [48.0]


# --- Continuing from a state


@pytest.mark.parametrize("step_h", STEPS_H)
@pytest.mark.parametrize("time_constant", ["corrected", "rated"])
def test_two_runs_make_one(make_fleet: Callable, step_h: float, time_constant: str) -> None:
    """A run cut anywhere, in holes and warm-ups too, gives what one run in one piece gives."""
    n_time, cuts = round(120 / step_h), [round(40 / step_h), round(77 / step_h)]
    fleet = make_fleet(40, n_time, step_h, seed=3)
    fleet.load_kva[1::5] = np.nan_to_num(fleet.load_kva[1::5], nan=5.0)  # see the note of simulate
    whole = simulate(
        fleet.load_kva, fleet.air_at_unit_c, fleet.parameters, step_h, time_constant=time_constant
    )
    state, pieces = None, []
    for first, last in zip([0, *cuts], [*cuts, n_time], strict=True):
        part = fleet.between(first, last)
        pieces.append(
            simulate(
                part.load_kva,
                part.air_at_unit_c,
                part.parameters,
                step_h,
                time_constant=time_constant,
                state=state,
            )
        )
        state = pieces[-1].end_state
    assert_array_equal(np.hstack([piece.counted for piece in pieces]), whole.counted)
    assert_allclose(
        np.hstack([piece.hot_spot_c for piece in pieces]), whole.hot_spot_c, rtol=0, atol=1e-9
    )
    assert_allclose(
        np.hstack([piece.aging_factor for piece in pieces]), whole.aging_factor, rtol=1e-9
    )
    assert_allclose(state.hole_h, whole.end_state.hole_h, atol=1e-9)
    assert_allclose(state.warm_up_left_h, whole.end_state.warm_up_left_h, atol=1e-9)


def test_continued_run_has_no_warm_up(pole_unit: ThermalParameters) -> None:
    """What follows a stored state counts from its first hour."""
    first = simulate(np.full((1, 24), 40.0), np.array(30.0), pole_unit, 1.0)
    second = simulate(np.full((1, 24), 40.0), np.array(30.0), pole_unit, 1.0, state=first.end_state)
    assert not first.counted.any()
    assert second.counted.all()


# --- Properties


@settings(max_examples=30, deadline=None)
@given(
    st.lists(st.floats(0.0, 2.0), min_size=30, max_size=60),
    st.floats(0.0, 0.5),
    st.sampled_from(["corrected", "rated"]),
)
def test_more_load_is_never_cooler(
    load_pu: list[float], more_pu: float, time_constant: str
) -> None:
    """Load added in every interval makes no interval cooler."""
    unit = ThermalParameters(*map(np.array, (50.0, 53.0, 27.0, 5.0, 0.8, 0.8, 6.0, 1 / 12, 110.0)))
    less_kva = 50.0 * np.array([load_pu])
    air_temp_c = np.array(30.0)
    less = simulate(less_kva, air_temp_c, unit, 1.0, time_constant=time_constant)
    more = simulate(less_kva + 50.0 * more_pu, air_temp_c, unit, 1.0, time_constant=time_constant)
    assert np.all(more.hot_spot_c >= less.hot_spot_c - 1e-9)
    assert np.all(more.aging_factor >= less.aging_factor * (1 - 1e-9))


def test_wrong_shapes_and_steps_are_named(pole_unit: ThermalParameters) -> None:
    """Each message says what was given and what is allowed."""
    air = np.array(30.0)
    with pytest.raises(ModelRangeError, match="load_kva = array of shape"):
        simulate(np.zeros((2, 5)), air, pole_unit, 1.0)
    with pytest.raises(ModelRangeError, match="step_h = 0 h is no interval length"):
        simulate(np.zeros((1, 5)), air, pole_unit, 0.0)
    with pytest.raises(ModelRangeError, match="state = 3 units"):
        simulate(np.zeros((1, 5)), air, pole_unit, 1.0, state=ThermalState.unknown(3))
    with pytest.raises(ModelRangeError, match="rated_kva = 0 of unit number 1"):
        ThermalParameters(
            np.array([50.0, 0.0]), *map(np.array, (53.0, 27.0, 5.0, 0.8, 0.8, 6.0, 1 / 12, 110.0))
        )
    with pytest.raises(ModelRangeError, match="loss_ratio = array of shape"):
        ThermalParameters(
            np.full(3, 50.0),
            np.array(53.0),
            np.array(27.0),
            np.full(2, 5.0),
            *map(np.array, (0.8, 0.8, 6.0, 1 / 12, 110.0)),
        )
