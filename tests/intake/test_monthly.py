"""Meters that are read once a month: their energy spread over the hours, kept to the kWh."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tracker.intake.spread import BUSINESS_DAY, HOME_DAY, invented_shape
from tracker.store.blocks import Quality
from tracker.store.models import MonthlyEnergy

SPREAD = int(Quality.HELD | Quality.ESTIMATED | Quality.SPREAD)
JULY = 31 * 24


@pytest.fixture
def feeders(new_ground):
    """Sites A1 and A2 on feeder F-A, B on F-B."""
    ground = new_ground()
    for site, feeder in (("A1", "F-A"), ("A2", "F-A"), ("B", "F-B")):
        ground.site(site, feeder=feeder)
        ground.unit(50.0, site)
    return ground


def two_shapes() -> tuple[np.ndarray, np.ndarray]:
    """Return two loads of a mean of 2 and 6 kW: by day, and in the evening."""
    hour = np.arange(JULY) % 24
    return 1.0 + 2.0 * ((hour >= 6) & (hour < 18)), 3.0 + 12.0 * (hour >= 18)


def test_the_shape_is_the_mean_of_the_class_on_the_feeder(feeders) -> None:
    """By hand: readings over their own mean, and the mean of these. 744 kWh over July's 744 hours are
    1 kW times the shape, whatever the customers' sizes; another class or feeder says nothing."""
    day, evening = two_shapes()
    for name, site, kw in (
        ("I-1", "A1", day),
        ("I-2", "A2", evening),
        ("I-3", "B", 1.0 + np.arange(JULY) % 5),
        ("I-4", "A1", 1.0 + np.arange(JULY) % 7),
    ):
        feeders.meter(name, site)
        feeders.read(name, kw)
    feeders.meter("M", "A2")
    feeders.classes(**{"I-1": "home", "I-2": "home", "I-3": "home", "I-4": "shop", "M": "home"})
    feeders.energy("M", 744.0)
    spread = feeders.spread("M")
    np.testing.assert_allclose(spread, (day / 2.0 + evening / 6.0) / 2.0, rtol=1e-6)
    assert feeders.problems() == []


def test_where_the_feeder_has_none_the_class_anywhere_stands_in(feeders) -> None:
    """And its hours alone: where the feeder's own meters were read, they count."""
    day, evening = two_shapes()
    feeders.meter("I-1", "B")
    feeders.read("I-1", day)
    feeders.meter("M", "A1")
    feeders.energy("M", 744.0)
    np.testing.assert_allclose(feeders.spread("M"), day / 2.0, rtol=1e-6)
    feeders.meter("I-2", "A2")
    feeders.read("I-2", evening[:240])
    mixed = np.concatenate([evening[:240] / 6.0, day[240:] / 2.0])
    np.testing.assert_allclose(feeders.spread("M"), mixed * 744 / mixed.sum(), rtol=1e-6)
    assert feeders.problems() == []


def test_the_invented_shape_where_nobody_is_read(feeders) -> None:
    """Documented as invented: a home's evening, a business's working day; by local hours, as the month
    begins at local midnight."""
    feeders.meter("M", "A1")
    feeders.energy("M", 1000.0, "2025-07-01T05:00", "2025-08-01T05:00")
    spread = feeders.spread("M")
    assert len(spread) == JULY
    assert spread.index[0] == pd.Timestamp("2025-07-01T05:00Z")
    np.testing.assert_allclose(
        spread.iloc[:24] / spread.iloc[:24].mean(), HOME_DAY / HOME_DAY.mean(), rtol=1e-5
    )
    assert spread.sum() == pytest.approx(1000.0, abs=1e-3)
    feeders.classes(M="Small commercial")
    spread = feeders.spread("M")
    week = spread.iloc[:168].to_numpy().reshape(7, 24)  # from Tuesday, 1 July 2025
    np.testing.assert_allclose(
        week[0] / week[0].mean(), BUSINESS_DAY / BUSINESS_DAY.mean(), rtol=1e-5
    )
    assert week[4].sum() == pytest.approx(week[0].sum() / 3)  # Saturday
    assert week[6].sum() == pytest.approx(week[0].sum())  # Monday
    assert spread.sum() == pytest.approx(1000.0, abs=1e-3)
    assert feeders.problems() == []


@pytest.mark.parametrize("month", [660, 661, 666])
@pytest.mark.parametrize("customer_class", [None, "home", "office"])
def test_invented_shapes_have_a_mean_of_one(month, customer_class) -> None:
    """A shape has no size of its own."""
    assert invented_shape(customer_class, month, 0).mean() == pytest.approx(1.0)


def test_intervals_that_were_read_keep_their_readings(feeders) -> None:
    """240 h of 2 kW hold 480 of 1,488 kWh: 1,008 kWh are left for the other 504 h. Where readings hold
    more than all of it, nothing is left, and nothing is taken away."""
    feeders.meter("M", "A1")
    feeders.read("M", np.full(240, 2.0), "2025-07-05")
    feeders.energy("M", 1488.0)
    load, spread = feeders.load("A1"), feeders.spread("M")
    assert len(spread) == JULY - 240
    assert spread.sum() == pytest.approx(1008.0, abs=1e-3)
    assert load.sum() == pytest.approx(1488.0, abs=1e-3)
    assert (feeders.flags("A1")[spread.index] == SPREAD).all()
    assert (feeders.measured("A1")[spread.index] == 0.0).all()
    assert feeders.measured("A1").sum() == 240
    feeders.energy("M", 100.0)
    assert feeders.spread("M").sum() == 0.0
    assert feeders.load("A1").sum() == pytest.approx(480.0)
    assert feeders.problems() == []


def test_spread_energy_stands_before_filling(feeders) -> None:
    """A month's energy says more of a gap than like days do."""
    feeders.meter("M", "A1")
    kw = np.full(JULY, 2.0)
    kw[300:310] = np.nan
    feeders.read("M", kw)
    assert (feeders.flags("A1").iloc[300:310] & int(Quality.LIKE_DAYS)).all()
    feeders.energy("M", 734 * 2.0 + 50.0)
    assert (feeders.flags("A1").iloc[300:310] == SPREAD).all()
    assert feeders.load("A1").iloc[300:310].sum() == pytest.approx(50.0)


def test_a_meter_of_quarter_hours_and_a_zone_half_an_hour_off(feeders) -> None:
    """The energy is kept in steps that fit both the readings and the month's ends."""
    feeders.meter("M", "A1")
    feeders.read("M", np.full(96, 2.0), "2025-07-05", step_min=15)
    feeders.energy("M", 700.0, "2025-06-30T18:30", "2025-07-31T18:30")
    spread = feeders.spread("M")
    assert spread.index[0] == pd.Timestamp("2025-06-30T18:30Z")
    assert spread.index[-1] == pd.Timestamp("2025-07-31T18:15Z")
    assert spread.sum() / 4 + 48.0 == pytest.approx(700.0, abs=1e-3)
    assert feeders.problems() == []


def test_power_factor_and_multiplier_count(feeders) -> None:
    """By hand: 744 kWh flat are 1 kW, at power factor 0.8 behind 20:1 they are 25 kVA."""
    feeders.meter("I", "B")
    feeders.read("I", np.full(JULY, 3.0) + 0.0)
    feeders.meter("M", "A1", multiplier=20.0, power_factor=0.8)
    feeders.energy("M", 744.0)
    np.testing.assert_allclose(feeders.load("A1"), 25.0, rtol=1e-6)


def test_it_follows_what_it_stands_on(feeders) -> None:
    """Readings, connections, classes, feeders: whatever changes, the spread follows at once."""
    day, evening = two_shapes()
    feeders.meter("M", "A1")
    feeders.energy("M", 744.0)
    invented = feeders.spread("M")
    feeders.read("I", day)  # connected to nothing, it is read at intervals all the same
    np.testing.assert_allclose(feeders.spread("M"), day / 2.0, rtol=1e-6)
    feeders.meter("I-2", "A2")
    feeders.read("I-2", evening)
    np.testing.assert_allclose(feeders.spread("M"), evening / 6.0, rtol=1e-6)
    feeders.classes(**{"I-2": "shop"})
    np.testing.assert_allclose(feeders.spread("M"), day / 2.0, rtol=1e-6)
    feeders.classes(M="shop")
    np.testing.assert_allclose(feeders.spread("M"), evening / 6.0, rtol=1e-6)
    feeders.classes(M="farm", I="shop")
    assert not np.allclose(feeders.spread("M"), invented)
    assert feeders.problems() == []


@settings(
    max_examples=12,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)
@given(steps=st.permutations(range(7)))
def test_any_order_gives_the_same_store(new_ground: Callable, steps: list[int]) -> None:
    """Energy, readings, classes and connections in any order: the same loads, bit for bit."""
    day, evening = two_shapes()
    ground = new_ground()
    for site in ("A1", "A2"):
        ground.site(site, feeder="F-A")
        ground.unit(50.0, site)

    def put(step: int) -> None:
        (
            lambda: ground.meter("M", "A1"),
            lambda: ground.meter("I", "A2", ends="2025-07-20"),
            lambda: ground.energy("M", 744.0, "2025-07-01T05:00", "2025-08-01T05:00"),
            lambda: ground.energy("M", 500.0, "2025-08-01T05:00", "2025-09-01T05:00"),
            lambda: ground.read("I", day),
            lambda: ground.read("N", evening),
            lambda: ground.classes(M="home", I="home", N="home"),
        )[step]()

    for step in steps:
        put(step)
    assert ground.problems() == []
    load = ground.load("A1")
    assert load.sum() * 1.0 == pytest.approx(1244.0, abs=2e-3)
    august = load["2025-08-02":]
    assert august.iloc[:24].max() / august.iloc[:24].min() == pytest.approx(
        HOME_DAY.max() / HOME_DAY.min(), rel=1e-5
    )
    on_feeder = load["2025-07-02":"2025-07-02"].to_numpy()
    assert on_feeder.max() / on_feeder.min() == pytest.approx(3.0, rel=1e-5)


# --- The file -------------------------------------------------------------------------------------

UNITS = "unit_id,rated_kva,site_id,feeder\nT,25,S,F\n"
CONNECTIONS = "meter_id,site_id\nM,S\nN,S\n"


@pytest.fixture
def connected(new_utility, made_store, tmp_path):
    """Two meters on a site."""
    return new_utility(tmp_path, made_store(("units", UNITS), ("connections", CONNECTIONS)))


def test_months_are_taken_and_spread(connected, fates) -> None:
    """A file of monthly energy, by calendar months of the zone; a second import changes nothing."""
    text = "Meter ID,month,kWh,class\nM,2025-07,744,home\nN,2025-07,100,\nM,2025-08,500,home\nN,2025-08,0,\n"
    options = {"timezone": "America/Chicago"}
    assert fates(connected.take("monthly", text, **options)) == (4, 0, 0, 0)
    load = connected.site_load("S")
    assert load.index[0] == pd.Timestamp("2025-07-01T05:00Z")
    assert load.index[-1] == pd.Timestamp("2025-09-01T04:00Z")
    assert load.sum() * 0.95 == pytest.approx(1344.0, abs=5e-3)
    assert fates(connected.take("monthly", text, **options)) == (0, 4, 0, 0)
    assert connected.problems() == []


def test_a_corrected_month_keeps_the_former(connected, fates) -> None:
    """Superseded energy stays, with the file that replaced it."""
    heading = "meter_id,month,kwh,class\n"
    connected.take("monthly", heading + "M,2025-07,744,home\n")
    assert fates(connected.take("monthly", heading + "M,2025-07,800,\n")) == (0, 0, 1, 0)
    assert fates(connected.take("monthly", heading + "M,2025-07,800,shop\n")) == (0, 0, 1, 0)
    assert connected.count(MonthlyEnergy) == 2
    with connected.database.reading() as connection:
        rows = connection.exec_driver_sql(
            "SELECT kwh, replaced_by IS NULL FROM monthly_energy ORDER BY kwh"
        ).all()
    assert [tuple(row) for row in rows] == [(744.0, 0), (800.0, 1)]
    assert connected.problems() == []


def test_a_file_that_corrects_itself(connected, fates) -> None:
    """Of two rows of one month the later one counts."""
    text = "meter_id,month,kwh\nM,2025-07,744\nM,2025-07,700\nM,2025-07,700\n"
    assert fates(connected.take("monthly", text)) == (1, 1, 1, 0)
    assert connected.count(MonthlyEnergy) == 1


@pytest.mark.parametrize(
    ("row", "code"),
    [
        ("M,2025-13,1,", "month.no_month"),
        ("M,July,1,", "month.no_month"),
        ("M,2025-07-01,1,", "month.no_month"),
        (",2025-07,1,", "meter_id.blank"),
        ("M,,1,", "month.blank"),
        ("M,2025-07,,", "kwh.blank"),
        ("M,2025-07,-1,", "kwh.not_allowed"),
        ("M,2025-07,much,", "kwh.not_allowed"),
        ("GOOD,2025-08,1,shop", "class.two_values"),
    ],
)
def test_what_is_no_month_of_energy_is_refused(connected, fates, row, code) -> None:
    """Each with its reason; the rest of the file is taken."""
    text = f"meter_id,month,kwh,class\nGOOD,2025-07,1,home\n{row}\n"
    report = connected.take("monthly", text)
    assert fates(report) == (1, 0, 0, 1)
    assert [refusal.code for refusal in report.refusals] == [code]


def test_a_month_of_another_zone_is_refused(connected, fates) -> None:
    """It would count five hours twice."""
    text = "meter_id,month,kwh\nM,2025-07,744\n"
    connected.take("monthly", text, timezone="America/Chicago")
    report = connected.take("monthly", text)
    assert fates(report) == (0, 0, 0, 1)
    assert report.refusals[0].code == "month.overlaps"
    assert connected.problems() == []


def test_a_refused_row_gives_no_class(connected, fates) -> None:
    """What was not taken must leave no trace in the store."""
    connected.take("monthly", "meter_id,month,kwh,class\nM,2025-07,744,home\n")
    connected.take("monthly", "meter_id,month,kwh,class\nM,2025-99,744,shop\n")
    with connected.database.reading() as connection:
        found = connection.exec_driver_sql("SELECT customer_class FROM series WHERE name = 'M'")
        assert found.scalar() == "home"
