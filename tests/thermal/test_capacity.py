"""Thermal capacity and the rated time constant."""

from __future__ import annotations

import numpy as np
import pytest

from tracker.thermal.capacity import rated_time_constant_h, thermal_capacity_wh_per_k


def test_pounds_and_gallons_of_the_guide() -> None:
    """C = 0.06 lb + 0.04 lb + 1.33 gal, IEEE C57.91 clause 7 (from memory); 1 lb = 0.45359237 kg
    and 1 US gal = 3.785411784 L exactly (common practice)."""
    ours = thermal_capacity_wh_per_k(200 * 0.45359237, 100 * 0.45359237, 20 * 3.785411784)
    np.testing.assert_allclose(ours, 0.06 * 200 + 0.04 * 100 + 1.33 * 20, rtol=1e-12)


@pytest.mark.parametrize(
    ("quantities", "printed"), [((1, 0, 0), 0.1323), ((0, 1, 0), 0.0882), ((0, 0, 1), 0.351)]
)
def test_per_kilogram_and_litre(quantities: tuple[float, float, float], printed: float) -> None:
    """0.1323 and 0.0882 Wh/K a kg, 0.351 Wh/K a L: computed from the guide's figures."""
    half_digit = 5e-5 if printed < 0.3 else 5e-4
    np.testing.assert_allclose(thermal_capacity_wh_per_k(*quantities), printed, atol=half_digit)


def test_time_constant_is_the_time_the_losses_take_to_store_the_rise() -> None:
    """Without cooling, the rated losses bring the oil to its rated rise in just that time."""
    capacity = thermal_capacity_wh_per_k([90.0, 400.0], [40.0, 180.0], [45.0, 200.0])
    hours = rated_time_constant_h(capacity, [53.0, 55.0], [298.0, 1_800.0])
    np.testing.assert_allclose(hours * [298.0, 1_800.0] / capacity, [53.0, 55.0], rtol=1e-12)
