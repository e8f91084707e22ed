"""Settings with their defaults, in one place; every result stores those it was made with."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, cast, get_args

from tracker.errors import InputError

Method = Literal["c57.91"]
TimeConstant = Literal["corrected", "rated"]

#: Power factor that turns kW into kVA where no reactive reading stands beside it.
DEFAULT_POWER_FACTOR = 0.95

#: Hot spot above which gas bubbles may form in the oil [°C]; C57.91, from memory.
DEFAULT_HOT_SPOT_LIMIT_C = 140.0

#: Normal insulation life at the reference hot spot [h]; C57.91 table of life criteria, from memory.
DEFAULT_LIFE_H = 180_000.0

#: Hours at the start of a series that only bring the thermal state to life.
WARM_UP_H = 24.0

#: Longest hole in the data after which the thermal state is warmed up anew [h].
LONGEST_CARRIED_HOLE_H = 24.0

#: Share of the period that a unit's data must cover to be ranked among the others [%].
LEAST_COVERAGE_PCT = 80.0


@dataclass(frozen=True, slots=True)
class AssessmentSettings:
    """What an assessment was asked to do."""

    method: Method = "c57.91"
    time_constant: TimeConstant = "corrected"
    hot_spot_limit_c: float = DEFAULT_HOT_SPOT_LIMIT_C
    life_h: float = DEFAULT_LIFE_H


def checked_settings(
    method: str, time_constant: str, hot_spot_limit_c: float, life_h: float
) -> AssessmentSettings:
    """Return settings as a person gave them.

    Raises
    ------
    InputError
        If one is not known or out of range.
    """
    for name, value, allowed in (
        ("method", method, get_args(Method)),
        ("time constant", time_constant, get_args(TimeConstant)),
    ):
        if value not in allowed:
            raise InputError(f"{name} = {value!r} is not known; allowed: {', '.join(allowed)}.")
    if not 80.0 <= hot_spot_limit_c <= 300.0:
        raise InputError(
            f"hot-spot limit = {hot_spot_limit_c:g} °C is out of range; allowed: 80 to 300 °C."
        )
    if not 1_000.0 <= life_h <= 1e7:
        raise InputError(f"life = {life_h:g} h is out of range; allowed: 1,000 to 10,000,000 h.")
    return AssessmentSettings(
        cast("Method", method), cast("TimeConstant", time_constant), hot_spot_limit_c, life_h
    )
