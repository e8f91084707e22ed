"""What is known of a unit, and what is assumed where the register is blank."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np

from tracker.errors import ModelRangeError
from tracker.thermal.parameters import ThermalParameters

Origin = Literal["given", "derived", "assumed"]

#: Average winding rises of liquid-immersed units [°C] and the hot-spot temperature of normal aging
#: each stands for [°C]: 30 ambient + rise + 15 (10 for 55 °C rise) hot-spot allowance, IEEE C57.91.
REFERENCE_HOT_SPOT_C = {65.0: 110.0, 55.0: 95.0}

#: Hot-spot rise over ambient at rated load [K], IEEE C57.91 clause 7 (from memory).
HOT_SPOT_RISE_C = {65.0: 80.0, 55.0: 65.0}

#: Cooling classes, IEEE and IEC letters, and the kind of oil flow that decides the exponents.
#: OA/FA/FOA/FOW are the former American letters of the same classes (common practice).
COOLING_FLOW = {
    "ONAN": "natural",
    "OA": "natural",
    "KNAN": "natural",
    "ONAF": "fans",
    "FA": "fans",
    "KNAF": "fans",
    "OFAF": "forced",
    "FOA": "forced",
    "OFWF": "forced",
    "FOW": "forced",
    "ODAF": "directed",
    "ODWF": "directed",
}

#: Exponents (n, m) by oil flow, IEEE C57.91 clause 7 (from memory).
EXPONENTS = {
    "natural": (0.8, 0.8),
    "fans": (0.9, 0.8),
    "forced": (0.9, 0.8),
    "directed": (1.0, 1.0),
}

#: "Winding time constant about 5 min", IEEE C57.91 clause 7 (from memory).
WINDING_TIME_CONSTANT_H = 5 / 60


@dataclass(frozen=True, slots=True)
class _DefaultSet:
    """Characteristics assumed for units up to a rating."""

    largest_kva: float
    top_oil_rise_c: float
    loss_ratio: float
    top_oil_time_constant_h: float


#: Defaults by winding rise, smallest ratings first; from memory: small pole units as in studies of
#: vehicle charging, larger ones the guide's own set. Defaults, not truth.
DEFAULT_SETS: dict[float, tuple[_DefaultSet, ...]] = {
    65.0: (
        _DefaultSet(50.0, 53.0, 4.9, 6.9),
        _DefaultSet(np.inf, 55.0, 3.2, 3.0),
    ),
    55.0: (_DefaultSet(np.inf, 45.0, 3.2, 3.0),),
}


@dataclass(frozen=True, slots=True)
class Nameplate:
    """The figures of a unit that its heat depends on; None where the register is blank."""

    rated_kva: float
    phases: int | None = None
    winding_rise_c: float | None = None
    cooling: str | None = None
    no_load_loss_w: float | None = None
    load_loss_w: float | None = None
    loss_ratio: float | None = None
    top_oil_rise_c: float | None = None
    hot_spot_rise_c: float | None = None
    oil_exponent: float | None = None
    winding_exponent: float | None = None
    top_oil_time_constant_h: float | None = None
    winding_time_constant_h: float | None = None


@dataclass(frozen=True, slots=True)
class Characteristic:
    """A figure, and where it comes from."""

    value: float | str
    origin: Origin


#: Names of the figures `completed` returns, in the order a nameplate is read.
CHARACTERISTICS = (
    "phases",
    "winding_rise_c",
    "cooling",
    "loss_ratio",
    "top_oil_rise_c",
    "hot_spot_rise_c",
    "oil_exponent",
    "winding_exponent",
    "top_oil_time_constant_h",
    "winding_time_constant_h",
)


def completed(nameplate: Nameplate) -> dict[str, Characteristic]:
    """Fill the blanks of a nameplate.

    Parameters
    ----------
    nameplate : Nameplate

    Returns
    -------
    dict of str to Characteristic
        Every name of `CHARACTERISTICS`, each with its origin: given in the register, derived from
        given losses, or assumed from the defaults of this module.

    Raises
    ------
    ModelRangeError
        If the hot-spot rise does not lie above the top-oil rise.

    Examples
    --------
    >>> figures = completed(Nameplate(25.0, top_oil_rise_c=50.0))
    >>> figures["top_oil_rise_c"], figures["loss_ratio"]
    (Characteristic(value=50.0, origin='given'), Characteristic(value=4.9, origin='assumed'))
    """
    rise_c = nameplate.winding_rise_c or 65.0
    cooling = nameplate.cooling or "ONAN"
    oil_exponent, winding_exponent = EXPONENTS[COOLING_FLOW[cooling]]
    defaults = next(
        each for each in DEFAULT_SETS[rise_c] if nameplate.rated_kva <= each.largest_kva
    )
    assumed: dict[str, float | str] = {
        "phases": 1,
        "winding_rise_c": 65.0,
        "cooling": "ONAN",
        "loss_ratio": defaults.loss_ratio,
        "top_oil_rise_c": defaults.top_oil_rise_c,
        "hot_spot_rise_c": HOT_SPOT_RISE_C[rise_c],
        "oil_exponent": oil_exponent,
        "winding_exponent": winding_exponent,
        "top_oil_time_constant_h": defaults.top_oil_time_constant_h,
        "winding_time_constant_h": WINDING_TIME_CONSTANT_H,
    }
    figures: dict[str, Characteristic] = {}
    for name in CHARACTERISTICS:
        value = getattr(nameplate, name)
        if value is not None:
            figures[name] = Characteristic(value, "given")
        else:
            figures[name] = Characteristic(assumed[name], "assumed")
    if nameplate.loss_ratio is None and nameplate.no_load_loss_w and nameplate.load_loss_w:
        ratio = nameplate.load_loss_w / nameplate.no_load_loss_w
        figures["loss_ratio"] = Characteristic(ratio, "derived")
    _check_gradient(figures)
    return figures


def _check_gradient(figures: dict[str, Characteristic]) -> None:
    hot_spot, top_oil = figures["hot_spot_rise_c"], figures["top_oil_rise_c"]
    if float(hot_spot.value) <= float(top_oil.value):
        raise ModelRangeError(
            f"hot_spot_rise_c = {hot_spot.value:g} K ({hot_spot.origin}) must lie above "
            f"top_oil_rise_c = {top_oil.value:g} K ({top_oil.origin}); both are over ambient"
        )


def thermal_parameters(nameplates: Iterable[Nameplate]) -> ThermalParameters:
    """Set nameplates, their blanks filled, side by side for the thermal equations."""
    rows = [_thermal_row(nameplate) for nameplate in nameplates]
    table = np.array(rows, dtype=np.float64).reshape(len(rows), 9)
    return ThermalParameters(*(np.ascontiguousarray(column) for column in table.T))


@lru_cache(maxsize=100_000)
def _thermal_row(nameplate: Nameplate) -> Sequence[float]:
    figures = completed(nameplate)
    number = {name: float(figure.value) for name, figure in figures.items() if name != "cooling"}
    return (
        nameplate.rated_kva,
        number["top_oil_rise_c"],
        number["hot_spot_rise_c"] - number["top_oil_rise_c"],
        number["loss_ratio"],
        number["oil_exponent"],
        number["winding_exponent"],
        number["top_oil_time_constant_h"],
        number["winding_time_constant_h"],
        REFERENCE_HOT_SPOT_C[number["winding_rise_c"]],
    )
