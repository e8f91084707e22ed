"""Settings with their defaults, in one place; every result stores those it was made with."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

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


@dataclass(frozen=True, slots=True)
class AssessmentSettings:
    """What an assessment was asked to do."""

    method: Method = "c57.91"
    time_constant: TimeConstant = "corrected"
    hot_spot_limit_c: float = DEFAULT_HOT_SPOT_LIMIT_C
    life_h: float = DEFAULT_LIFE_H
