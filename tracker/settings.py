"""Settings with their defaults, in one place; every result stores those it was made with."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
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

#: Longest gap in air temperatures that a straight line bridges [h]; a longer one stays a gap.
LONGEST_WEATHER_LINE_H = 3.0

#: Share of a unit's energy that must be measured for it to be ranked among the others [%].
LEAST_COVERAGE_PCT = 80.0


@dataclass(frozen=True, slots=True)
class AssessmentSettings:
    """What an assessment was asked to do."""

    method: Method = "c57.91"
    time_constant: TimeConstant = "corrected"
    hot_spot_limit_c: float = DEFAULT_HOT_SPOT_LIMIT_C
    life_h: float = DEFAULT_LIFE_H


@dataclass(frozen=True, slots=True)
class ReadingRules:
    """Rules of validation and filling; 0 switches a rule off.

    A doubted reading keeps its value: a real peak is what an engineer looks for. Only what no meter
    behind a fuse can have carried is set aside, and filled as a gap.
    """

    spike_excess_pct: float = 180.0
    """Doubt the highest reading of a UTC day when it exceeds the third highest by more than this
    share of the third [%]. (highest - third highest)/third highest > 180 %: from memory of the
    validation rules of the Californian and Ontario markets."""

    spike_least_load_pct: float = 25.0
    """... and only when it is at least this share of the rating of the unit it hangs on [%]."""

    stuck_h: float = 24.0
    """Doubt readings that stay at the same value, other than zero, for as long [h]; common practice."""

    zero_run_h: float = 48.0
    """Doubt readings that stay at zero for as long [h]; common practice."""

    negative_pct: float = 0.5
    """Doubt negative readings when they are fewer than this share of the meter's month [%]: a meter
    behind which something exports has more of them. The project's own."""

    beyond_rating: float = 5.0
    """Set aside the mean of one meter beyond this many times the rating of the unit it hangs on: fuse
    and unit would be gone. The project's own."""

    line_gap_h: float = 2.0
    """Fill gaps up to this length by a straight line [h]: 2 h, California; Ontario has 1 h (both
    seen)."""

    like_weeks: float = 3.0
    """Fill longer gaps by the mean of the same time of the same weekday so many weeks before and after,
    and none longer than that: three weeks, Ontario (seen)."""

    least_measured_pct: float = 60.0
    """Scale a site for the meters that are missing when at least this share of its energy is measured
    [%]; the project's own."""


#: Highest value of each rule; the lowest is 0.
HIGHEST_RULES = ReadingRules(
    spike_excess_pct=10_000.0,
    spike_least_load_pct=1_000.0,
    stuck_h=744.0,
    zero_run_h=744.0,
    negative_pct=100.0,
    beyond_rating=1_000.0,
    line_gap_h=24.0,
    like_weeks=4.0,
    least_measured_pct=100.0,
)


def checked_rules(values: Mapping[str, float]) -> ReadingRules:
    """Return rules of validation and filling, the defaults where `values` names none.

    Raises
    ------
    InputError
        If a rule is not known, or its value out of range.
    """
    names = [field.name for field in fields(ReadingRules)]
    for name, value in values.items():
        if name not in names:
            raise InputError(f"rule = {name!r} is not known; allowed: {', '.join(names)}.")
        highest = getattr(HIGHEST_RULES, name)
        if not 0.0 <= value <= highest:
            raise InputError(
                f"{name} = {value:g} is out of range; allowed: 0 (off) to {highest:g}."
            )
        if name == "like_weeks" and value % 1:
            raise InputError(f"like_weeks = {value:g} is no whole number; allowed: 0 to 4.")
    return ReadingRules(**values)


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
