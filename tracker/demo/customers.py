"""How much each kind of customer of the invented district draws, interval by interval.

Every function returns the net power at the meter in kW, float32, shape (n_step,) of the clock;
negative is export. Each customer draws from a random stream of its own, in order of time, so that a
shorter demo holds the same readings.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from tracker.demo.clock import Clock, FloatArray
from tracker.demo.weather import Sky

# Share of a home's plugs and lights in use by local hour, weekdays and weekends.
_WEEKDAY = np.array(
    [4, 3, 3, 3, 3, 5, 9, 11, 8, 6, 6, 6, 7, 6, 6, 7, 10, 14, 17, 18, 17, 14, 10, 6], np.float32
)
_WEEKEND = np.array(
    [5, 4, 3, 3, 3, 4, 5, 8, 11, 12, 12, 12, 12, 11, 10, 10, 12, 14, 16, 17, 16, 14, 11, 7],
    np.float32,
)
_IN_USE_PU = np.stack([_WEEKDAY, _WEEKEND]) / np.float32(9.0)


@dataclass(frozen=True, slots=True)
class Home:
    """A home: plugs, appliances, air conditioning, and on some a heat pump, a car or a roof."""

    size: float = 1.0  #: 1 is the average home
    cooling_from_c: float = 21.0  #: air temperature at which cooling starts [°C]
    cooling_kw: float = 4.2  #: what the air conditioner can draw [kW]
    heat_pump: bool = False
    charging_from_day: int | None = None  #: day of the world the car came
    charger_kw: float = 7.2
    solar_kw: float = 0.0


@dataclass(frozen=True, slots=True)
class Shop:
    """A shop or small works: busy by day, closed on Sundays."""

    busy_kw: float


@dataclass(frozen=True, slots=True)
class School:
    """A school: weekdays, empty in the summer break, air conditioned."""

    teaching_kw: float


@dataclass(frozen=True, slots=True)
class Pumps:
    """Irrigation pumps: days on end in summer, more in a dry heat, nothing in winter."""

    pump_kw: float
    n_pump: int


@dataclass(frozen=True, slots=True)
class Quarry:
    """A stone quarry with crushers: weekdays, one shift."""

    crusher_kw: float


Customer = Home | Shop | School | Pumps | Quarry


def customer_kw(
    customer: Customer, clock: Clock, sky: Sky, air_c: FloatArray, rng: np.random.Generator
) -> FloatArray:
    """Return the net power at the customer's meter [kW], shape (n_step,)."""
    match customer:
        case Home():
            return _home_kw(customer, clock, sky, air_c, rng)
        case Shop():
            return _shop_kw(customer, clock, air_c, rng)
        case School():
            return _school_kw(customer, clock, air_c, rng)
        case Pumps():
            return _pumps_kw(customer, clock, sky, rng)
        case Quarry():
            return _quarry_kw(customer, clock, rng)


def _home_kw(
    home: Home, clock: Clock, sky: Sky, air_c: FloatArray, rng: np.random.Generator
) -> FloatArray:
    charging_rng, habit_rng = rng.spawn(2)
    habit = habit_rng.standard_normal((clock.n_step, 2), dtype=np.float32)
    in_use_pu = _IN_USE_PU[clock.weekend.astype(np.intp), clock.hour]
    plugs_kw = np.float32(0.52 * home.size) * in_use_pu * np.exp(0.42 * habit[:, 0])
    # Oven, dryer, water heater: seldom, for one interval, more often when the home is busy.
    appliances_kw = np.where(
        habit[:, 1] > 1.75 - 0.45 * in_use_pu, 1.1 + 0.55 * np.abs(habit[:, 0]), np.float32(0.0)
    )
    cooling_kw = np.clip(
        0.185 * home.size * (air_c - home.cooling_from_c), 0, home.cooling_kw
    ) * np.clip(1 + 0.16 * habit[:, 1], 0.5, 1.15)
    net_kw = plugs_kw + appliances_kw + cooling_kw
    if home.heat_pump:
        net_kw += np.clip(0.115 * home.size * (11.0 - air_c), 0, 4.5)
    if home.charging_from_day is not None:
        net_kw += _charging_kw(home, home.charging_from_day, clock, charging_rng)
    if home.solar_kw:
        net_kw -= np.float32(home.solar_kw) * sky.sun_pu
    return np.asarray(net_kw, dtype=np.float32)


def _charging_kw(home: Home, from_day: int, clock: Clock, rng: np.random.Generator) -> FloatArray:
    """Return the car's charging: most evenings, from coming home until the day's miles are back."""
    plugged, hurry, miles = rng.random((clock.n_day, 3)).T
    start_h = 17.2 + 4.0 * hurry
    length_h = np.minimum((4.0 + 13.0 * miles) / home.charger_kw, 6.0)
    length_h[(plugged > 0.72) | (np.arange(clock.n_day) < from_day)] = 0.0
    # Energy since the beginning is a broken line; each interval takes what it rises meanwhile.
    # The tiny shift keeps the corners apart on days without charging.
    start_step = clock.first_step_of_day + start_h / clock.step_h
    knots = np.stack([start_step, start_step + length_h / clock.step_h + 1e-9], axis=1).ravel()
    charged_h = np.stack([np.cumsum(length_h) - length_h, np.cumsum(length_h)], axis=1).ravel()
    by_edge_h = np.interp(np.arange(clock.n_step + 1), knots, charged_h, left=0.0)
    return np.asarray(np.diff(by_edge_h) * home.charger_kw / clock.step_h, dtype=np.float32)


def _shop_kw(shop: Shop, clock: Clock, air_c: FloatArray, rng: np.random.Generator) -> FloatArray:
    open_now = (clock.hour >= 8) & (clock.hour < 19) & ~clock.sunday
    mood = rng.standard_normal(clock.n_step, dtype=np.float32)
    share = 0.16 + open_now * (0.46 + 0.019 * np.clip(air_c - 18, 0, 21)) + 0.035 * mood
    return np.asarray(shop.busy_kw * np.clip(share, 0.08, 1.15), dtype=np.float32)


def _school_kw(
    school: School, clock: Clock, air_c: FloatArray, rng: np.random.Generator
) -> FloatArray:
    in_term = ((clock.day_of_year < 150) | (clock.day_of_year > 226)) & (clock.day_of_year < 354)
    taught = in_term & ~clock.weekend & (clock.hour >= 7) & (clock.hour < 16)
    mood = 1 + 0.04 * rng.standard_normal(clock.n_step, dtype=np.float32)
    share = 0.13 + taught * (0.42 + 0.026 * np.clip(air_c - 18, 0, 18))
    return np.asarray(school.teaching_kw * share * mood, dtype=np.float32)


def _pumps_kw(pumps: Pumps, clock: Clock, sky: Sky, rng: np.random.Generator) -> FloatArray:
    draws = rng.standard_normal((clock.n_day, pumps.n_pump))
    day_of_year = clock.day_of_year[clock.first_step_of_day]
    season = (day_of_year > 145) & (day_of_year < 255)
    thirst = (sky.day_mean_c - 25.0) / 4.0
    wish = draws.copy()
    for day in range(1, clock.n_day):  # a pump that runs tends to run on
        wish[day] = 0.75 * wish[day - 1] + 0.65 * draws[day]
    running = (season[:, None] & (wish + thirst[:, None] > 0)).sum(axis=1)
    ripple = 1 + 0.015 * rng.spawn(1)[0].standard_normal(clock.n_step, dtype=np.float32)
    return np.asarray(0.06 + pumps.pump_kw * running[clock.day] * ripple, dtype=np.float32)


def _quarry_kw(quarry: Quarry, clock: Clock, rng: np.random.Generator) -> FloatArray:
    shift = ~clock.weekend & (clock.hour >= 6) & (clock.hour < 16)
    feed = np.clip(0.86 + 0.12 * rng.standard_normal(clock.n_step, dtype=np.float32), 0.3, 1.1)
    lunch = np.where(clock.hour == 12, 0.35, 1.0)
    return np.asarray(quarry.crusher_kw * (0.05 + 0.9 * shift * feed * lunch), dtype=np.float32)
