"""What the thermal equations need to know of each unit, as arrays side by side."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from tracker.errors import ModelRangeError

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class ThermalParameters:
    """One entry a unit, float64, all of shape (n_unit,); a scalar holds for every unit.

    Names follow IEEE C57.91 clause 7; rises and gradients are at rated load.

    Raises
    ------
    ModelRangeError
        If an entry is not above 0, or the arrays differ in length.
    """

    rated_kva: FloatArray  #: nameplate rating [kVA]
    top_oil_rise_k: FloatArray  #: top oil over ambient [K]
    hot_spot_gradient_k: FloatArray  #: hottest spot over top oil [K]
    loss_ratio: FloatArray  #: R, load loss over no-load loss [1]
    oil_exponent: FloatArray  #: n [1]
    winding_exponent: FloatArray  #: m [1]
    top_oil_time_constant_h: FloatArray  #: tau at rated load [h]
    winding_time_constant_h: FloatArray  #: tau_w [h]
    reference_hot_spot_c: FloatArray  #: hot spot of normal aging, 110 or 95 [°C]

    def __post_init__(self) -> None:
        given = {f.name: np.atleast_1d(getattr(self, f.name)) for f in fields(self)}
        n_unit = max(len(values) for values in given.values())
        for name, values in given.items():
            if values.shape not in ((1,), (n_unit,)):
                raise ModelRangeError(
                    f"{name} = array of shape {values.shape} is not one entry a unit; "
                    f"allowed ({n_unit},) as the longest of the characteristics. "
                    "Give each characteristic once a unit."
                )
            column = np.ascontiguousarray(np.broadcast_to(values, n_unit), dtype=np.float64)
            bad = np.flatnonzero(~((column > 0.0) & np.isfinite(column)))
            if bad.size:
                raise ModelRangeError(
                    f"{name} = {column[bad[0]]:g} of unit number {bad[0]} (counted from 0) is no "
                    "characteristic of a transformer; allowed above 0. Correct the unit's data."
                )
            object.__setattr__(self, name, column)

    @property
    def n_unit(self) -> int:
        """Number of units."""
        return len(self.rated_kva)

    def take(self, index: NDArray[np.intp] | slice) -> ThermalParameters:
        """Return the parameters of some of the units, in the order of `index`."""
        return ThermalParameters(**{f.name: getattr(self, f.name)[index] for f in fields(self)})
