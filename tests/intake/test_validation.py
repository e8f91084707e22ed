"""Rules that doubt readings, or set them aside: each by hand, each a setting."""

from __future__ import annotations

import numpy as np
import pytest

from tracker.errors import InputError
from tracker.settings import ReadingRules, checked_rules
from tracker.store.blocks import Quality

DOUBTFUL = int(Quality.DOUBTFUL)
FILLED = int(Quality.FILLED)


def days(n_day: int = 7) -> np.ndarray:
    """Return hourly loads that break no rule: no two neighbours alike, a quiet evening peak [kW]."""
    hour = np.arange(24 * n_day)
    return 2.0 + np.exp(-((((hour % 24) - 19) / 4.0) ** 2)) + 0.001 * (hour % 17)


def doubted(ground) -> list[int]:
    """Return the hours since 1 July that are doubted."""
    flags = ground.flags()
    hours = (flags.index - flags.index[0]) // np.timedelta64(1, "h")
    return hours[(flags & DOUBTFUL) != 0].tolist()


@pytest.fixture
def one_meter(ground):
    """A meter of power factor 1 behind a unit of 25 kVA."""
    ground.meter("M")
    return ground


def test_clean_readings_are_not_doubted(one_meter) -> None:
    """A rule that finds something everywhere finds nothing."""
    derived = one_meter.read("M", days(28))
    assert (dict(derived.marked), derived.n_line, derived.n_like_days) == ({}, 0, 0)
    assert doubted(one_meter) == []
    assert one_meter.marks() == []


@pytest.mark.parametrize(("peak", "found"), [(8.39, False), (8.41, True)])
def test_spike_by_hand(one_meter, peak, found) -> None:
    """(highest − third highest)/third highest > 180 %: from memory (check values, section 5). The third
    highest is 3 kW, so 8.4 kW is the edge; 25 % of the rating is 6.25 kVA. The value is kept."""
    kw = np.full(24, 1.0) + 0.01 * np.arange(24)
    kw[[3, 9]] = 3.0, 3.1
    kw[12] = peak
    # the third highest of 8.4, 3.1, 3.0 is 3.0
    derived = one_meter.read("M", kw)
    assert doubted(one_meter) == ([12] if found else [])
    assert derived.marked.get("spike", 0) == int(found)
    assert one_meter.load().iloc[12] == pytest.approx(peak)


@pytest.mark.parametrize(("rated_kva", "found"), [(40.0, True), (40.1, False)])
def test_a_small_spike_is_no_spike(new_ground, rated_kva, found) -> None:
    """A kettle in an empty house heats no unit: under 25 % of the rating nothing is doubted."""
    ground = new_ground()
    ground.unit(rated_kva)
    ground.meter("M", multiplier=2.0)
    kw = np.full(24, 0.5) + 0.01 * np.arange(24)
    kw[12] = 5.0  # 10 kVA behind its instrument transformers
    ground.read("M", kw)
    assert doubted(ground) == ([12] if found else [])


def test_a_small_spike_beside_a_large_load_is_none(one_meter) -> None:
    """The share of the rating is asked of the spike, not of the month: 8 kW on one day do not
    make 5 kW of the next a spike."""
    kw = np.concatenate([np.full(24, 7.0), np.full(24, 0.5)]) + 0.01 * np.tile(np.arange(24), 2)
    kw[10], kw[36] = 8.0, 5.0
    one_meter.read("M", kw)
    assert doubted(one_meter) == []


def test_spikes_look_at_days_in_utc(one_meter) -> None:
    """Three readings as high make a peak, when they are of one day; each day is looked at alone."""
    kw = days(2)
    kw[[20, 21, 22]] = 12.0, 12.1, 12.2
    one_meter.read("M", kw)
    assert doubted(one_meter) == []
    kw = days(2)
    kw[[22, 23, 24]] = 12.0, 12.1, 12.2  # two on the first day, one on the second
    one_meter.read("M", kw)
    assert doubted(one_meter) == [22, 23, 24]


@pytest.mark.parametrize(("hours", "found"), [(23, False), (24, True), (40, True)])
def test_stuck_readings_by_hand(one_meter, hours, found) -> None:
    """The same value for 24 hours or longer (common practice); all of the run is doubted."""
    kw = days()
    kw[30 : 30 + hours] = 2.5
    derived = one_meter.read("M", kw)
    assert doubted(one_meter) == (list(range(30, 30 + hours)) if found else [])
    assert derived.marked.get("stuck", 0) == (hours if found else 0)


@pytest.mark.parametrize(("hours", "found"), [(47, False), (48, True)])
def test_zeros_by_hand(one_meter, hours, found) -> None:
    """Zero may be an empty house for a day; for 48 hours it is doubted (common practice)."""
    kw = days()
    kw[30 : 30 + hours] = 0.0
    derived = one_meter.read("M", kw)
    assert doubted(one_meter) == (list(range(30, 30 + hours)) if found else [])
    assert dict(derived.marked) == ({"zeros": hours} if found else {})
    assert (one_meter.load().iloc[30 : 30 + hours] == 0.0).all()


def test_a_gap_ends_a_run(one_meter) -> None:
    """Nobody knows what was in between."""
    one_meter.rules(line_gap_h=0, like_weeks=0)
    kw = days()
    kw[30:54] = 2.5
    kw[40] = np.nan
    one_meter.read("M", kw)
    assert doubted(one_meter) == []


def test_runs_of_quarter_hours_are_measured_in_hours(one_meter) -> None:
    """24 hours are 96 quarters."""
    kw = np.repeat(days(), 4) + 0.0001 * np.tile([0, 1, 2, 3], 24 * 7)
    kw[200:295] = 2.5
    one_meter.read("M", kw, step_min=15)
    assert doubted(one_meter) == []
    kw[200:296] = 2.5
    one_meter.read("M", kw, step_min=15)
    assert len(doubted(one_meter)) == 96


@pytest.mark.parametrize(("n_negative", "found"), [(3, True), (4, False)])
def test_a_few_negative_readings_by_hand(one_meter, n_negative, found) -> None:
    """Fewer than 0.5 % of the 744 hours of July are 3; a roof with panels has more of them."""
    kw = days(31)
    at = [100 + 50 * k for k in range(n_negative)]
    kw[at] = -1.0
    derived = one_meter.read("M", kw)
    assert doubted(one_meter) == (at if found else [])
    assert derived.marked.get("negative", 0) == (n_negative if found else 0)


def test_what_no_fuse_carries_is_set_aside(one_meter) -> None:
    """A mean over five times the rating, 125 kVA, is no reading: it counts as a gap, is filled as one,
    and is told. One just under it stays, doubted as a spike."""
    kw = days()
    kw[50], kw[100] = 125.1, 124.9
    derived = one_meter.read("M", kw)
    load, flags = one_meter.load(), one_meter.flags()
    assert load.iloc[50] == pytest.approx((kw[49] + kw[51]) / 2)
    assert flags.iloc[50] & FILLED
    assert load.iloc[100] == pytest.approx(124.9)
    assert doubted(one_meter) == [100]
    assert dict(derived.marked) == {"spike": 1, "beyond": 1}
    assert "1 readings set aside" in " ".join(derived.notes())


def test_multiplier_and_power_factor_count_in_what_is_possible(ground) -> None:
    """2 kW at power factor 0.5 behind 40:1 are 160 kVA."""
    ground.meter("M", multiplier=40.0, power_factor=0.5)
    kw = 0.1 * days()
    kw[50] = 2.0
    assert ground.read("M", kw).marked["beyond"] == 1


def test_readings_of_the_unit_itself_are_never_set_aside(ground) -> None:
    """What is measured at the unit is its load, however large; it is the reading that is wanted."""
    kva = days()
    kva[50] = 200.0
    derived = ground.read("T-S", kva, quantity="kva", kind="unit")
    assert "beyond" not in derived.marked
    assert ground.load().iloc[50] == 200.0
    assert doubted(ground) == [50]


def test_without_a_unit_what_needs_its_rating_rests(new_ground) -> None:
    """A site whose unit is not known yet has no rating to compare with."""
    ground = new_ground()
    ground.site("S")
    ground.meter("M")
    kw = days()
    kw[50] = 1000.0
    assert dict(ground.read("M", kw).marked) == {}


@pytest.mark.parametrize(
    ("rule", "broken"),
    [
        ("spike_excess_pct", {12: 20.0}),
        ("stuck_h", dict.fromkeys(range(30, 60), 2.5)),
        ("zero_run_h", dict.fromkeys(range(30, 80), 0.0)),
        ("negative_pct", {40: -1.0}),
        ("beyond_rating", {50: 500.0}),
    ],
)
def test_every_rule_can_be_switched_off(one_meter, rule, broken) -> None:
    """Each is a setting; a changed one derives all loads anew, and the store stays sound."""
    kw = days(14)
    kw[list(broken)] = list(broken.values())
    assert one_meter.read("M", kw).marked
    one_meter.rules(**{rule: 0.0} | ({"spike_excess_pct": 0.0} if rule == "beyond_rating" else {}))
    assert one_meter.marks() == []
    assert doubted(one_meter) == []
    np.testing.assert_allclose(one_meter.load(), np.abs(kw), rtol=1e-6)
    assert one_meter.problems() == []
    one_meter.rules(**{rule: getattr(ReadingRules(), rule), "spike_excess_pct": 180.0})
    assert one_meter.marks() != []
    assert one_meter.problems() == []


def test_rules_are_checked() -> None:
    """One clear line for what is wrong."""
    with pytest.raises(InputError, match="rule = 'spikes' is not known; allowed: spike_excess_pct"):
        checked_rules({"spikes": 1.0})
    with pytest.raises(
        InputError, match=r"stuck_h = -1 is out of range; allowed: 0 \(off\) to 744\."
    ):
        checked_rules({"stuck_h": -1.0})
    with pytest.raises(InputError, match=r"like_weeks = 1\.5 is no whole number"):
        checked_rules({"like_weeks": 1.5})


def test_marks_are_listed_with_their_place(one_meter) -> None:
    """A person must be able to look: meter, rule, from when to when, how high."""
    kw = days()
    kw[30:54] = 2.5
    kw[100] = 500.0
    one_meter.read("M", kw)
    stuck, beyond = one_meter.marks()
    assert (stuck.site_id, stuck.name, stuck.rule, stuck.set_aside) == ("S", "M", "stuck", False)
    assert f"{stuck.starts_at:%dT%H} {stuck.ends_at:%dT%H}" == "02T06 03T06"
    assert stuck.highest_kva == 2.5
    assert (beyond.rule, beyond.highest_kva, beyond.set_aside) == ("beyond", 500.0, True)
    assert one_meter.marks(names=["other"]) == []
    assert one_meter.marks(rules=["beyond"]) == [beyond]
    assert one_meter.marks(site_ids=[]) == []


def test_marks_of_a_meter_that_moved_are_told_once(ground) -> None:
    """A reading counts at one site, and so does what is wrong with it."""
    ground.unit(25.0, "S-2")
    ground.meter("M", ends="2025-07-03")
    ground.meter("M", "S-2", starts="2025-07-03")
    kw = days()
    kw[30:70] = 2.5
    derived = ground.read("M", kw)
    assert derived.marked["stuck"] == 40
    assert [(mark.site_id, mark.rule) for mark in ground.marks()] == [
        ("S", "stuck"),
        ("S-2", "stuck"),
    ]
