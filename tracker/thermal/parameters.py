"""What the thermal equations need to know of each unit, as arrays side by side."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class ThermalParameters:
    """One entry a unit, float64, all of shape (n_unit,).

    Names follow IEEE C57.91 clause 7; rises and gradients are at rated load.
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

    @property
    def n_unit(self) -> int:
        """Number of units."""
        return len(self.rated_kva)

    def take(self, index: NDArray[np.intp] | slice) -> ThermalParameters:
        """Return the parameters of some of the units, in the order of `index`."""
        return ThermalParameters(**{f.name: getattr(self, f.name)[index] for f in fields(self)})
