"""The check values computed anew, each beside what its source prints."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from tracker.fleet.nameplate import REFERENCE_HOT_SPOT_C, Nameplate, thermal_parameters
from tracker.fleet.ratings import PREFERRED_RATINGS_KVA
from tracker.settings import DEFAULT_HOT_SPOT_LIMIT_C, TimeConstant
from tracker.thermal import (
    NORMAL_INSULATION_LIFE_H,
    ThermalParameters,
    aging_acceleration_factor,
    assess_fleet,
    corrected_time_constant,
    loss_of_life_pct,
    per_unit_life,
    simulate,
    steady_state,
)
from tracker.thermal.aging import ARRHENIUS_SLOPE_K
from tracker.thermal.capacity import thermal_capacity_wh_per_k
from tracker.verification import values
from tracker.verification.values import Held, PrintedValues

#: The printed table of F_AA is met to this; its last two digits at 180 °C differ from float64.
AGING_TABLE_RTOL = 1e-4

#: A figure that the package holds as such, not computes, is the printed one but for its storage.
SAME_RTOL = 1e-12


@dataclass(frozen=True, slots=True)
class Check:
    """A value from outside and ours."""

    what: str
    value: str  #: as its source prints it
    ours: float
    allowed: float  #: largest difference at which the value still holds
    held: Held
    source: str

    @property
    def difference(self) -> float:
        """Ours less the printed value."""
        return self.ours - _number(self.value)

    @property
    def holds(self) -> bool:
        """Whether ours is what the source prints."""
        return abs(self.difference) <= self.allowed

    def as_row(self) -> dict[str, Any]:
        """Return it for tables and scripts."""
        return {
            "what": self.what,
            "value": self.value,
            "ours": self.ours,
            "difference": self.difference,
            "allowed": self.allowed,
            "held": self.held,
            "source": self.source,
            "holds": self.holds,
        }


def checks() -> list[Check]:
    """Recompute every check value that the package holds.

    Returns
    -------
    list of Check
        In the order of `tracker.verification.values`.
    """
    return [check for group in _GROUPS for check in group()]


def _number(printed: str) -> float:
    return float(printed.replace(" ", ""))


def half_last_digit(printed: str) -> float:
    """Return half of one in the last digit that is printed.

    Examples
    --------
    >>> half_last_digit("0.0028"), half_last_digit("65 000"), half_last_digit("9.80e-18")
    (5e-05, 0.5, 5e-21)
    """
    digits, _, power = printed.replace(" ", "").partition("e")
    return float(f"0.5e{int(power or 0) - len(digits.partition('.')[2])}")


def _computed(
    table: PrintedValues, what: str, printed: str, ours: Any, *, rtol: float = 0.0
) -> Check:
    """Compare to half the last printed digit, or to `rtol` where that is more."""
    allowed = max(half_last_digit(printed), rtol * abs(_number(printed)))
    return Check(what, printed, float(np.squeeze(ours)), allowed, table.held, table.source)


def _same(table: PrintedValues, what: str, printed: str, ours: Any) -> Check:
    """Compare a figure that has to be the printed one exactly."""
    allowed = SAME_RTOL * abs(_number(printed))
    return Check(what, printed, float(np.squeeze(ours)), allowed, table.held, table.source)


# --- Aging ----------------------------------------------------------------------------------------


def _aging_factor() -> Iterator[Check]:
    for table, reference_c, rtol in (
        (values.AGING_FACTOR_110, 110.0, AGING_TABLE_RTOL),
        (values.AGING_FACTOR_95, 95.0, 0.0),
    ):
        for hot_spot_c, printed in table.rows():
            what = f"F_AA at {hot_spot_c} °C"
            ours = aging_acceleration_factor(float(hot_spot_c), reference_c)
            if float(hot_spot_c) == reference_c:
                yield _same(table, what, printed, ours)
            else:
                yield _computed(table, what, printed, ours, rtol=rtol)


def _per_unit_life() -> Iterator[Check]:
    table = values.LIFE_CONSTANTS
    a = float(per_unit_life(110.0)) / math.exp(15_000 / (110 + 273))
    for (name, printed), ours in zip(table.rows(), (ARRHENIUS_SLOPE_K, a), strict=True):
        yield _same(table, name, printed, ours)
    table = values.LIFE_AT_REFERENCE
    for rise, printed_a, printed in table.rows():
        reference_c = REFERENCE_HOT_SPOT_C[float(rise)]
        missed_pct = 100.0 * (per_unit_life(reference_c, float(printed_a)) - 1.0)
        yield _computed(table, f"misses 1 by, {rise} °C rise, %", printed, missed_pct)


def _reference_hot_spot() -> Iterator[Check]:
    for table in (values.REFERENCE_65, values.REFERENCE_55):
        for rise, ambient, allowance, printed in table.rows():
            ours = REFERENCE_HOT_SPOT_C[float(rise)]
            yield _same(table, f"hot spot of {ambient} + {rise} + {allowance}, °C", printed, ours)


def _normal_life() -> Iterator[Check]:
    hours_of = {criterion: hours for hours, criterion in NORMAL_INSULATION_LIFE_H.items()}
    for table in (values.NORMAL_LIFE, values.NORMAL_LIFE_SEEN):
        for criterion, printed in table.rows():
            ours = hours_of.get(criterion, math.nan)
            yield _same(table, f"{criterion}, h", printed, ours)
    table = values.LIFE_OF_A_DAY
    for life, printed in table.rows():
        used_pct = loss_of_life_pct(24.0, _number(life))
        yield _computed(table, f"a day of {life} h, %", printed, used_pct)


# --- What a unit is -------------------------------------------------------------------------------


def _exponents() -> Iterator[Check]:
    table = values.EXPONENTS
    for cooling, oil_exponent, winding_exponent in table.rows():
        unit = thermal_parameters([Nameplate(100.0, cooling=cooling)])
        yield _same(table, f"n, {cooling}", oil_exponent, unit.oil_exponent)
        yield _same(table, f"m, {cooling}", winding_exponent, unit.winding_exponent)


def _characteristics() -> Iterator[Check]:
    table = values.HOT_SPOT_RISE
    for rise, printed in table.rows():
        unit = thermal_parameters([Nameplate(100.0, winding_rise_c=float(rise))])
        ours = unit.top_oil_rise_k + unit.hot_spot_gradient_k
        yield _same(table, f"hot-spot rise, {rise} °C rise, K", printed, ours)
    table = values.CHARACTERISTICS
    for rating, rise, top_oil, gradient, loss_ratio, time_constant in table.rows():
        unit = thermal_parameters([Nameplate(float(rating), winding_rise_c=float(rise))])
        of_unit = f"{rating} kVA, {rise} °C rise"
        yield _same(table, f"top-oil rise, {of_unit}, K", top_oil, unit.top_oil_rise_k)
        yield _same(table, f"hot spot over oil, {of_unit}, K", gradient, unit.hot_spot_gradient_k)
        yield _same(table, f"R, {of_unit}", loss_ratio, unit.loss_ratio)
        yield _same(table, f"τ, {of_unit}, h", time_constant, unit.top_oil_time_constant_h)
    unit = thermal_parameters([Nameplate(100.0)])
    table = values.WINDING_TIME_CONSTANT
    ((printed,),) = table.rows()
    yield _same(table, "τ of the winding, min", printed, 60.0 * unit.winding_time_constant_h)
    table = values.BUBBLE_LIMIT
    ((printed,),) = table.rows()
    yield _same(table, "default hot-spot limit, °C", printed, DEFAULT_HOT_SPOT_LIMIT_C)


def _thermal_capacity() -> Iterator[Check]:
    table = values.THERMAL_CAPACITY
    one_of_each = np.eye(3)
    for (part, printed), quantities in zip(table.rows(), one_of_each, strict=True):
        yield _computed(table, f"{part}, Wh/K", printed, thermal_capacity_wh_per_k(*quantities))


# --- Temperatures ---------------------------------------------------------------------------------

AIR_TEMP_C = 30.0

UNIT = ThermalParameters(
    rated_kva=np.array([100.0]),
    top_oil_rise_k=np.array([53.0]),
    hot_spot_gradient_k=np.array([27.0]),
    loss_ratio=np.array([5.0]),
    oil_exponent=np.array([0.8]),
    winding_exponent=np.array([0.8]),
    top_oil_time_constant_h=np.array([6.0]),
    winding_time_constant_h=np.array([5 / 60]),
    reference_hot_spot_c=np.array([110.0]),
)


@dataclass(frozen=True, slots=True)
class _End:
    """How a run of a load that never falls ends."""

    top_oil_c: float
    hot_spot_c: float
    aging_factor: float  #: mean over what counts


def _readable(load_pu: list[float], step_h: float, time_constant: TimeConstant) -> _End:
    load_kva = UNIT.rated_kva * np.array([load_pu])
    trace = simulate(load_kva, np.array(AIR_TEMP_C), UNIT, step_h, time_constant=time_constant)
    mean = trace.aging_factor[trace.counted].mean()
    return _End(trace.top_oil_c[0, -1], trace.hot_spot_c[0, -1], mean)


def _kernel(load_pu: list[float], step_h: float, time_constant: TimeConstant) -> _End:
    load_kva = (UNIT.rated_kva * np.array([load_pu])).astype(np.float32)
    figures = assess_fleet(
        load_kva,
        np.full_like(load_kva, AIR_TEMP_C),
        np.array([0]),
        UNIT,
        step_h,
        hot_spot_limit_c=DEFAULT_HOT_SPOT_LIMIT_C,
        time_constant=time_constant,
    )
    mean = figures.aging_hours[0] / figures.counted_hours[0]
    return _End(figures.peak_top_oil_c[0], figures.peak_hot_spot_c[0], mean)


#: Both forms of the equations.
FORMS: dict[str, Callable[[list[float], float, TimeConstant], _End]] = {
    "formulas": _readable,
    "fleet kernel": _kernel,
}


def _steady_state() -> Iterator[Check]:
    table = values.STEADY_STATE
    for form, run in FORMS.items():
        for load_pu, top_oil, hot_spot, aging in table.rows():
            end = run([float(load_pu)] * 48, 1.0, "corrected")
            yield _computed(table, f"top oil at K {load_pu}, °C ({form})", top_oil, end.top_oil_c)
            yield _computed(
                table, f"hot spot at K {load_pu}, °C ({form})", hot_spot, end.hot_spot_c
            )
            yield _computed(table, f"F_AA at K {load_pu} ({form})", aging, end.aging_factor)


def _step() -> Iterator[Check]:
    """Compare after a day at half load, which is the warm-up, and then some hours at 1.5."""
    for form, run in FORMS.items():
        for hours, *printed in values.STEP_CORRECTED.rows():  # all of them one interval
            end = run([0.5] * (24 // int(hours)) + [1.5], float(hours), "corrected")
            yield from _after(values.STEP_CORRECTED, form, hours, printed, end)
    for form, run in FORMS.items():
        for hours, *printed in values.STEP_RATED.rows():  # hour by hour
            end = run([0.5] * 24 + [1.5] * int(hours), 1.0, "rated")
            yield from _after(values.STEP_RATED, form, hours, printed, end)


def _after(
    table: PrintedValues, form: str, hours: str, printed: list[str], end: _End
) -> Iterator[Check]:
    top_oil, hot_spot = printed
    yield _computed(table, f"top oil after {hours} h, °C ({form})", top_oil, end.top_oil_c)
    yield _computed(table, f"hot spot after {hours} h, °C ({form})", hot_spot, end.hot_spot_c)


def _time_constant() -> Iterator[Check]:
    table = values.CORRECTED_TIME_CONSTANT
    for before, after, printed in table.rows():
        ours = corrected_time_constant(
            steady_state(float(after), UNIT).top_oil_rise_k,
            steady_state(float(before), UNIT).top_oil_rise_k,
            UNIT.top_oil_rise_k,
            UNIT.top_oil_time_constant_h,
            UNIT.oil_exponent,
        )
        what = f"τ from K {before} to {after}, h"
        if before == after:  # the limit, n·τ_R
            yield _same(table, what, printed, ours)
        else:
            yield _computed(table, what, printed, ours)


# --- Ratings --------------------------------------------------------------------------------------


def _preferred_ratings() -> Iterator[Check]:
    """Compare rating by rating; one that the source does not print is compared with none."""
    table = values.PREFERRED_RATINGS
    for phases, *printed in table.rows():
        held = PREFERRED_RATINGS_KVA[int(phases)]
        for place, rating in enumerate(printed):
            ours = held[place] if place < len(held) else math.nan
            yield _same(table, f"{phases}-phase, size {place + 1}, kVA", rating, ours)
        yield _same(table, f"{phases}-phase, number of sizes", str(len(printed)), len(held))


_GROUPS: tuple[Callable[[], Iterator[Check]], ...] = (
    _aging_factor,
    _per_unit_life,
    _reference_hot_spot,
    _normal_life,
    _exponents,
    _characteristics,
    _thermal_capacity,
    _steady_state,
    _step,
    _time_constant,
    _preferred_ratings,
)
