"""Gaps: what is filled, by what, and that the order in which months come in does not matter."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tracker.store.blocks import Quality

FILLED, LIKE_DAYS, SCALED = int(Quality.FILLED), int(Quality.LIKE_DAYS), int(Quality.SCALED)
ESTIMATED, HELD = int(Quality.ESTIMATED), int(Quality.HELD)
JULY = 31 * 24


@pytest.fixture
def meter(ground):
    """One meter of power factor 1, alone at its site."""
    ground.meter("M")
    return ground


def ramp(n: int = JULY) -> np.ndarray:
    """Return hourly loads that rise by 0.001 kW an hour: the mean of like days whole weeks on either
    side is the missing value itself, as is the straight line."""
    return 5.0 + 0.001 * np.arange(n)


@pytest.mark.parametrize(("hours", "flag"), [(1, FILLED), (2, FILLED), (3, LIKE_DAYS)])
def test_short_gaps_by_a_line_longer_ones_by_like_days(meter, hours, flag) -> None:
    """Straight line up to 2 h: California working group (seen); three weeks of like days: Ontario
    (seen). By hand: between 1 and 4 kW a line goes over 2 and 3; like days know of no such dip."""
    kw = np.full(JULY, 6.0) + 0.001 * (np.arange(JULY) % 24)
    kw[399], kw[400 + hours] = 1.0, 1.0 + hours + 1
    kw[400 : 400 + hours] = np.nan
    derived = meter.read("M", kw)
    load, flags = meter.load(), meter.flags()
    assert (flags.iloc[400 : 400 + hours] & flag).all()
    wanted = (
        1.0 + np.arange(1, hours + 1)
        if flag == FILLED
        else 6.0 + 0.001 * (np.arange(400, 400 + hours) % 24)
    )
    np.testing.assert_allclose(load.iloc[400 : 400 + hours], wanted, rtol=1e-6)
    assert (derived.n_line, derived.n_like_days) == ((hours, 0) if flag == FILLED else (0, hours))
    assert (flags.drop(flags.index[400 : 400 + hours]) & (FILLED | LIKE_DAYS) == 0).all()


def test_like_days_are_the_same_weekday_within_three_weeks(meter) -> None:
    """By hand: readings 1, 2, 3 weeks before and after are 1, 2, 3 and 5, 6, 7 kW: their mean is 4. Those
    four weeks away do not count; of a gap in them the others are the mean."""
    kw = np.full(62 * 24, 9.0) + 0.001 * (np.arange(62 * 24) % 24)
    at = 30 * 24 + 5
    for week, value in ((-3, 1.0), (-2, 2.0), (-1, 3.0), (1, 5.0), (2, 6.0), (3, 7.0)):
        kw[at + 168 * week] = value
    kw[at - 2 : at + 2] = np.nan
    meter.read("M", kw)
    assert meter.load().iloc[at] == pytest.approx(4.0)
    kw[at + 168 - 2 : at + 168 + 2] = np.nan
    meter.site("S-2")
    meter.meter("N", "S-2")
    meter.read("N", kw)
    assert meter.load("S-2").iloc[at] == pytest.approx((1 + 2 + 3 + 6 + 7) / 5)


def test_nothing_is_invented_behind_the_newest_reading_or_before_the_first(meter) -> None:
    """A meter that fell silent is missing, until it is read again."""
    kw = ramp()
    kw[:100] = np.nan
    kw[600:] = np.nan
    meter.read("M", kw)
    load = meter.load()
    assert len(load) == 500
    assert not (meter.flags() & (FILLED | LIKE_DAYS)).any()
    meter.read("M", [5.7], "2025-07-30")
    assert len(meter.load()) == 597
    assert meter.problems() == []


@pytest.mark.parametrize(("days", "filled"), [(21, True), (22, False)])
def test_gaps_longer_than_the_weeks_looked_at_stay(meter, days, filled) -> None:
    """After three weeks nobody knows what a customer does."""
    kw = ramp(70 * 24)
    kw[480 : 480 + 24 * days] = np.nan
    meter.read("M", kw)
    assert len(meter.load()) == (70 * 24 if filled else (70 - days) * 24)
    assert meter.problems() == []


def test_a_gap_without_any_like_day_stays(meter) -> None:
    """Only a week is held: there is no like day, and the gap is left missing."""
    kw = ramp(7 * 24)
    kw[50:60] = np.nan
    meter.read("M", kw)
    assert len(meter.load()) == 7 * 24 - 10


def test_settings_of_filling(meter) -> None:
    """Each is a setting, 0 is off, and a change derives all anew."""
    kw = ramp()
    kw[100:102] = np.nan
    kw[400:410] = np.nan
    meter.read("M", kw)
    assert len(meter.load()) == JULY
    meter.rules(line_gap_h=0)
    assert (meter.flags().iloc[100:102] & LIKE_DAYS).all()
    meter.rules(like_weeks=0, line_gap_h=2)
    assert len(meter.load()) == JULY - 10
    meter.rules(line_gap_h=12)
    assert (meter.flags().iloc[400:410] & FILLED).all()
    meter.rules(line_gap_h=0)
    assert len(meter.load()) == JULY - 12
    assert meter.problems() == []


def test_gaps_of_quarter_hours_are_measured_in_hours(meter) -> None:
    """Two hours are eight quarters."""
    kw = np.repeat(ramp(), 4) + 0.0001 * np.tile([0, 1, 2, 3], JULY)
    kw[1000:1008] = np.nan
    kw[2000:2009] = np.nan
    derived = meter.read("M", kw, step_min=15)
    assert (derived.n_line, derived.n_like_days) == (8, 9)


def test_reactive_readings_are_filled_beside_active_ones(meter) -> None:
    """3 kW and 4 kvar are 5 kVA on both sides of the gap, and in it."""
    kw, kvar = np.full(JULY, 3.0), np.full(JULY, 4.0)
    kw[100:102] = kvar[100:102] = np.nan
    kw[400:410] = kvar[400:410] = np.nan
    meter.read("M", kw)
    meter.read("M", kvar, quantity="kvar")
    np.testing.assert_allclose(meter.load(), 5.0, rtol=1e-6)


def test_filled_is_not_measured(meter) -> None:
    """Of two meters of 6 and 2 kW the larger has a gap: a quarter of the energy is measured."""
    meter.meter("N")
    kw = np.full(48, 6.0)
    kw[10] = np.nan
    meter.read("M", kw)
    meter.read("N", np.full(48, 2.0))
    measured = meter.measured()
    assert measured.iloc[10] == 0.25
    assert (measured.drop(measured.index[10]) == 1.0).all()


def test_estimated_readings_are_not_measured_and_cost_nothing_elsewhere(meter) -> None:
    """What the utility estimated is a value, but none that was measured."""
    meter.meter("N")
    meter.read("M", np.full(48, 6.0), flags=HELD | ESTIMATED)
    meter.read("N", np.full(48, 2.0))
    assert (meter.measured() == 0.25).all()
    np.testing.assert_allclose(meter.load(), 8.0)
    assert all(blocks[1] is not None for blocks in meter.dump().values())
    meter.read("M", np.full(48, 6.0))
    assert all(blocks[1] is None for blocks in meter.dump().values())


def test_the_measured_unit_stands_first_its_filled_gaps_last(ground) -> None:
    """Where the unit's own reading has a gap, meters that were read say more than a line does."""
    ground.meter("M")
    ground.read("T-S", [7.0, np.nan, 9.0, np.nan, 11.0], quantity="kva", kind="unit")
    ground.read("M", [1.0, 1.0, 1.0, np.nan, np.nan])
    assert ground.load().tolist() == [7.0, 1.0, 9.0, 10.0, 11.0]
    assert [bool(flag & FILLED) for flag in ground.flags()] == [False, False, False, True, False]


# --- Against pandas, and in any order -------------------------------------------------------------


def filled_by_pandas(kw: pd.Series) -> pd.Series:
    """Fill in another way: runs by grouping, like days by shifting the index."""
    held = kw.notna()
    run = (held != held.shift()).cumsum()
    filled = kw.copy()
    shifted = pd.concat(
        [kw.shift(freq=pd.Timedelta(weeks=week)) for week in (-3, -2, -1, 1, 2, 3)], axis=1
    ).reindex(kw.index)
    like = shifted.mean(axis=1)
    line = kw.interpolate()
    for _, part in kw[~held].groupby(run[~held]):
        inside = kw.first_valid_index() < part.index[0] and part.index[-1] < kw.last_valid_index()
        if inside and len(part) <= 2:
            filled[part.index] = line[part.index]
        elif inside and len(part) <= 21 * 24:
            filled[part.index] = like[part.index]
    return filled.dropna()


def with_gaps(seed: int, n_day: int) -> pd.Series:
    """Return hourly readings with gaps of all lengths, some about the turns of the months."""
    rng = np.random.default_rng(seed)
    index = pd.date_range("2025-05-10", periods=24 * n_day, freq="h", tz="UTC")
    kw = pd.Series(rng.uniform(0.5, 3.0, len(index)).astype(np.float32), index=index, dtype=float)
    turns = [(31 - 10 + 1) * 24 + offset for offset in (0, 30 * 24)]
    for _ in range(rng.integers(1, 7)):
        length = int(rng.choice([1, 2, 3, 10, 60, 300, 500, 505, 600]))
        near = rng.choice([-1, *turns])
        start = rng.integers(0, len(kw)) if near < 0 else near - rng.integers(0, length + 1)
        kw.iloc[max(start, 0) : start + length] = math.nan
    return kw


def months_of(kw: pd.Series) -> list[pd.Series]:
    return [part for _, part in kw.groupby(kw.index.month) if part.notna().any()]


@settings(
    max_examples=25,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)
@given(seed=st.integers(0, 10_000), n_day=st.integers(40, 110), shuffle=st.randoms())
def test_any_order_of_months_gives_what_pandas_gives(
    new_ground: Callable, seed: int, n_day: int, shuffle
) -> None:
    """Files come in any order, and some twice in parts: the same store, whatever came first."""
    kw = with_gaps(seed, n_day)
    parts = months_of(kw)
    if not parts:
        return
    if seed % 2:  # half a month first, the rest of it later
        half = parts.pop(seed % len(parts))
        parts += [half.iloc[: len(half) // 2], half.iloc[len(half) // 2 :]]
    shuffle.shuffle(parts)
    ground = new_ground()
    ground.unit(25.0)
    ground.meter("M")
    ground.rules(spike_excess_pct=0, stuck_h=0)
    for part in parts:
        if part.notna().any():
            ground.read("M", part.to_numpy(), f"{part.index[0]:%Y-%m-%dT%H:%M}")
    wanted = filled_by_pandas(kw)
    load = ground.load()
    assert load.index.tolist() == wanted.index.tolist()
    np.testing.assert_allclose(load, wanted, rtol=1e-5)
    assert ground.problems() == []


def test_what_is_set_aside_beside_a_turn_of_the_month_in_any_order(new_ground) -> None:
    """A reading set aside is a gap that no count of readings tells of: July is full, and yet its last
    hour waits for August."""
    july, august = ramp(), 6.0 + ramp(240)
    july[-1] = 500.0
    stores = []
    for parts in ([0, 1], [1, 0]):
        ground = new_ground()
        ground.unit(25.0)
        ground.meter("M")
        for part in parts:
            ground.read("M", (july, august)[part], ("2025-07-01", "2025-08-01")[part])
        assert ground.problems() == []
        assert ground.load().iloc[JULY - 1] == pytest.approx((july[-2] + august[0]) / 2)
        stores.append(ground.dump())
    assert stores[0] == stores[1]


def test_a_corrected_month_fills_its_neighbours_anew(meter) -> None:
    """June's gap was filled from July's like days: when these are corrected, June must follow."""
    june = ramp(720)
    june[600:640] = np.nan
    meter.read("M", june, "2025-06-01")
    meter.read("M", ramp(), "2025-07-01")
    before = meter.load()["2025-06-26 00":"2025-06-27 15"]
    meter.read("M", 10.0 + ramp(), "2025-07-01")
    assert (meter.load()["2025-06-26 00":"2025-06-27 15"] > before + 1.0).all()
    assert meter.problems() == []
