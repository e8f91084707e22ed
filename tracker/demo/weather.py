"""The air and the sun over the invented district.

Drawn from the first day of the invented world on, so that a shorter or later cut of it shows the
same weather.
"""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

import numpy as np

from tracker.demo.clock import LATITUDE_DEG, Clock, FloatArray

HEAT_WAVE_DAY = dt.date(2025, 7, 17)  # its middle; it comes back on this day each year

#: Stations and how the air there differs from the valley's [K].
STATIONS_K = {"LKW-VALLEY": 0.0, "LKW-RIDGE": -1.6}


@dataclass(frozen=True)
class Sky:
    """Air temperature and sun, shape (n_step,)."""

    air_c: dict[str, FloatArray]  #: air temperature at each station [°C]
    day_mean_c: FloatArray  #: mean of each local day in the valley [°C], shape (n_day,)
    sun_pu: FloatArray  #: output of a photovoltaic roof over its rating


def draw_sky(clock: Clock, rng: np.random.Generator) -> Sky:
    """Draw the weather: seasons, days, fronts of several days, and a heat wave in July."""
    day_rng, step_rng = rng.spawn(2)
    draws = day_rng.standard_normal((clock.n_day + 2, 2))
    cloudy = 1 / (1 + np.exp(-1.6 * draws[:, 1] + 1.3))  # 0 clear … 1 overcast, mostly clear
    fronts = np.zeros(clock.n_day + 2)
    for day in range(1, clock.n_day + 2):
        fronts[day] = 0.68 * fronts[day - 1] + 0.73 * draws[day, 0]

    days = clock.day + (clock.hour + 0.5) / 24
    season = np.cos(2 * np.pi * (clock.day_of_year - 201) / 365.25)  # +1 on 20 July
    front_k = (
        (4.8 - 2.0 * season) * 1.8 * np.tanh(np.interp(days, np.arange(len(fronts)), fronts) / 1.8)
    )
    from_heat_wave_d = clock.day_of_year + clock.hour / 24 - HEAT_WAVE_DAY.timetuple().tm_yday - 0.5
    heat_wave = np.exp(-((from_heat_wave_d / 4.0) ** 4))
    swing_k = (6.6 - 2.2 * cloudy[clock.day] * (1 - heat_wave)) * np.cos(
        2 * np.pi * (clock.solar_hour - 15.3) / 24
    )
    jitter_k = 0.25 * step_rng.standard_normal(clock.n_step)
    valley_c = (
        13.0 + 14.2 * season + swing_k + (1 - heat_wave) * front_k + 7.0 * heat_wave + jitter_k
    )

    declination = np.deg2rad(23.45) * np.sin(2 * np.pi * (clock.day_of_year + 284) / 365)
    latitude = np.deg2rad(LATITUDE_DEG)
    sun_height = np.sin(latitude) * np.sin(declination) + np.cos(latitude) * np.cos(
        declination
    ) * np.cos(np.pi * (clock.solar_hour - 12) / 12)
    sun_pu = 0.86 * np.clip(sun_height, 0, None) ** 1.15 * (1 - 0.75 * cloudy[clock.day])

    n_by_day = np.bincount(clock.day, minlength=clock.n_day)
    return Sky(
        air_c={
            station: (valley_c + offset_k).astype(np.float32)
            for station, offset_k in STATIONS_K.items()
        },
        day_mean_c=(np.bincount(clock.day, valley_c, clock.n_day) / n_by_day).astype(np.float32),
        sun_pu=sun_pu.astype(np.float32),
    )
