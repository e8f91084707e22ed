"""Amperes, volts and phases to kVA; active to reactive power."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tracker.electrical.power import kva_per_amp, reactive_per_active, turns_ratio

#: Rated current, three-phase, line to line: kVA, V, A. Seen: forums.mikeholt.com/threads/…2409 (1000 kVA)
#: and elecalculator.com (500 kVA), with the fault currents at the terminals.
SEEN = [(1000.0, 480.0, 1203.0), (500.0, 480.0, 601.0)]


@pytest.mark.parametrize(("kva", "volts", "amps"), SEEN)
def test_rated_current_as_seen(kva, volts, amps) -> None:
    """To half the last printed digit."""
    assert kva / kva_per_amp(volts, 3) == pytest.approx(amps, abs=0.5)


def test_single_phase_by_hand() -> None:
    """A 25 kVA unit of 240 V carries 104.17 A: volts times amperes (common practice)."""
    assert kva_per_amp(240.0, 1) * 104.1667 == pytest.approx(25.0, rel=1e-5)


@given(
    hv_volts=st.floats(1e3, 5e4),
    lv_volts=st.floats(100.0, 1e3),
    amps_hv=st.floats(0.0, 1e3),
    phases=st.sampled_from([1, 3]),
)
def test_both_sides_carry_the_same_power(hv_volts, lv_volts, amps_hv, phases) -> None:
    """The ideal ratio: I_s = I_p/n, n = U_s/U_p (common practice); no power is lost in it."""
    amps_lv = amps_hv * turns_ratio(hv_volts, lv_volts)
    high, low = (
        amps * kva_per_amp(volts, phases)
        for amps, volts in ((amps_hv, hv_volts), (amps_lv, lv_volts))
    )
    assert low == pytest.approx(high, rel=1e-12)


@given(power_factor=st.floats(0.05, 1.0))
def test_active_and_reactive_power_make_the_power_factor(power_factor) -> None:
    """cos φ = P/S, and S the vector sum."""
    assert 1.0 / math.hypot(1.0, reactive_per_active(power_factor)) == pytest.approx(power_factor)


def test_arrays_go_through_as_they_are() -> None:
    """Shapes are kept; a power factor of one draws no reactive power."""
    assert reactive_per_active(np.ones((2, 3))).tolist() == [[0.0] * 3] * 2
    assert kva_per_amp([100.0, 100.0], [1, 3]).shape == (2,)
