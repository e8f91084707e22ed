"""Heat and aging of oil-immersed transformers: arrays in, arrays out, no I/O.

`tracker.thermal.c57_91` and `tracker.thermal.aging` are the published formulas, to read and check;
`tracker.thermal.kernel` computes the same figures for a fleet.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from tracker.thermal.aging import (
    NORMAL_INSULATION_LIFE_H,
    aging_acceleration_factor,
    equivalent_aging_factor,
    loss_of_life_pct,
    per_unit_life,
)
from tracker.thermal.c57_91 import (
    FleetFigures,
    Rises,
    ThermalState,
    Trace,
    corrected_time_constant,
    exponential_step,
    simulate,
    steady_state,
    summarise,
    ultimate_hot_spot_gradient,
    ultimate_top_oil_rise,
)
from tracker.thermal.parameters import ThermalParameters

if TYPE_CHECKING:
    from tracker.thermal.kernel import assess_fleet, trace_fleet

__all__ = [
    "NORMAL_INSULATION_LIFE_H",
    "FleetFigures",
    "Rises",
    "ThermalParameters",
    "ThermalState",
    "Trace",
    "aging_acceleration_factor",
    "assess_fleet",
    "corrected_time_constant",
    "equivalent_aging_factor",
    "exponential_step",
    "loss_of_life_pct",
    "per_unit_life",
    "simulate",
    "steady_state",
    "summarise",
    "trace_fleet",
    "ultimate_hot_spot_gradient",
    "ultimate_top_oil_rise",
]


def __getattr__(name: str) -> Any:
    """Bring in the fleet kernel, and with it the compiler, only when it is asked for."""
    if name in ("assess_fleet", "trace_fleet"):
        from tracker.thermal import kernel  # noqa: PLC0415 - see above

        return getattr(kernel, name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
