"""Load that no meter reads: always, or from dusk to dawn."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest

from tracker.intake.daylight import dark_share
from tracker.store.blocks import month_start_s
from tracker.store.models import UnmeteredLoad

JULY = 666  #: months since January 1970
KVA = 1 / 0.95  #: of a kW at the assumed power factor


@pytest.mark.parametrize(
    ("place", "date", "sunrise", "sunset"),
    [
        # Times of the almanacs for these places, from memory, to three minutes.
        ((41.88, -87.63), "2025-06-21", "10:16", "01:29"),  # Chicago: 5:16 and 20:29 local
        ((51.48, 0.0), "2025-06-21", "03:43", "20:21"),  # Greenwich: 4:43 and 21:21 local
        ((51.48, 0.0), "2025-12-21", "08:04", "15:53"),
    ],
)
def test_the_sun_of_the_almanac(place, date, sunrise, sunset) -> None:
    """From the minutes that are dark: by five-minute intervals."""
    month = int(np.datetime64(date, "M").astype(int))
    dark = dark_share(*place, month, 5)
    start = pd.Timestamp(month_start_s(month), unit="s", tz="UTC")
    rises, sets = (pd.Timestamp(f"{date}T{clock}Z") for clock in (sunrise, sunset))
    if sets < rises:
        sets += pd.Timedelta(days=1)

    def at(moment: pd.Timestamp) -> float:
        return float(dark[int((moment - start).total_seconds() // 300)])

    margin = pd.Timedelta(minutes=8)
    assert [at(rises - margin), at(rises + margin)] == [1.0, 0.0]
    assert [at(sets - margin), at(sets + margin)] == [0.0, 1.0]


def test_shares_of_longer_intervals_are_means_of_shorter_ones() -> None:
    """The energy is the same at any step."""
    fine = dark_share(41.9, -87.6, JULY, 5)
    np.testing.assert_allclose(
        fine.reshape(-1, 12).mean(axis=1), dark_share(41.9, -87.6, JULY, 60), atol=1e-9
    )


@pytest.mark.parametrize(
    ("latitude", "month", "hours"),
    [(0.0, JULY, 31 * 11.88), (78.2, JULY, 0.0), (78.2, 671, 31 * 24.0), (-78.2, 671, 0.0)],
)
def test_dark_hours_of_a_month(latitude, month, hours) -> None:
    """At the equator the night is a little short of half the day, as the air bends light; Svalbard has
    neither sunset in July nor sunrise in December (common knowledge), the far south the reverse."""
    assert dark_share(latitude, 15.6, month, 60).sum() == pytest.approx(hours, rel=2e-3)


def test_the_polar_night_begins_and_ends_within_a_month() -> None:
    """Tromsø's sun stays down from late November to mid-January (common knowledge)."""
    january = dark_share(69.65, 18.96, 660, 60).reshape(31, 24).sum(axis=1)
    assert (january[:12] == 24.0).all()
    assert (np.diff(january[17:]) < 0).all()
    assert january[-1] == pytest.approx(18.5, abs=0.7)


def test_it_is_added_to_what_the_meters_read(ground) -> None:
    """By hand: 9.5 kW and 0.95 kW at power factor 0.95 are 11 kVA; the load is there where the meters'
    is, and its share is not measured."""
    ground.meter("M", power_factor=0.95)
    ground.read("M", np.full(24, 9.5))
    derived = ground.unmetered(0.95)
    assert derived.n_site_months == 1
    np.testing.assert_allclose(ground.load(), 11.0, rtol=1e-6)
    np.testing.assert_allclose(ground.measured(), 182 / 200)
    assert len(ground.load()) == 24
    ground.unmetered(1.9)
    np.testing.assert_allclose(ground.load(), 12.0, rtol=1e-6)
    assert ground.problems() == []


def test_it_adds_as_a_vector_and_beside_export(ground) -> None:
    """4 kW of lights against 4 kW of export leave the lights' reactive power alone."""
    ground.meter("M", power_factor=1.0)
    ground.read("M", [-4.0])
    ground.unmetered(4.0)
    np.testing.assert_allclose(ground.load(), [4.0 * math.tan(math.acos(0.95))], rtol=1e-6)


def test_what_the_unit_itself_measures_holds_the_lights_too(ground) -> None:
    """They must not count twice."""
    ground.read("T-S", [7.0, 7.0], quantity="kva", kind="unit")
    ground.unmetered(4.0)
    assert ground.load().tolist() == [7.0, 7.0]


def test_a_site_of_lights_alone_has_load_in_the_months_of_readings(ground) -> None:
    """July is held, June is not; when it comes, the lights have load in it too."""
    ground.site("L", latitude=41.9, longitude=-87.6)
    ground.unit(10.0, "L")
    ground.unmetered(2.0, site="L")
    assert len(ground.load("L")) == 0
    ground.meter("M")
    ground.read("M", np.full(24, 3.0))
    np.testing.assert_allclose(ground.load("L"), 2.0 * KVA, rtol=1e-6)
    assert len(ground.load("L")) == 31 * 24
    ground.read("N", [1.0], "2025-06-10")
    assert len(ground.load("L")) == 61 * 24
    ground.unmetered(1.0, "dusk to dawn", "L")
    dark = dark_share(41.9, -87.6, JULY, 60)
    np.testing.assert_allclose(ground.load("L").iloc[-744:], (2.0 + dark) * KVA, rtol=1e-6)
    assert (ground.measured("L") == 0.0).all()
    assert ground.problems() == []


def test_a_connected_meter_that_is_not_read_leaves_the_site_missing(ground) -> None:
    """The lights are a small part of a load that nobody knows."""
    ground.unit(10.0, "L")
    ground.unmetered(2.0, site="L")
    ground.meter("SILENT", "L")
    ground.meter("M")
    ground.read("M", np.full(24, 3.0))
    assert len(ground.load("L")) == 0
    assert ground.problems() == []


# --- The file -------------------------------------------------------------------------------------

UNITS = "unit_id,rated_kva,site_id,latitude,longitude\nT,25,S,41.9,-87.6\nU,25,NOWHERE,,\n"


@pytest.fixture
def sites(new_utility, made_store, tmp_path):
    """Two sites, of one of which nobody knows where it is."""
    return new_utility(tmp_path, made_store(("units", UNITS)))


def test_rows_are_taken_corrected_and_unchanged(sites, fates) -> None:
    """The former figure stays, with the file that replaced it."""
    heading = "Site ID,kW,hours\n"
    text = heading + "S,0.5,always\nS,1.5,dusk-to-dawn\nNOWHERE,1,Always\n"
    assert fates(sites.take("unmetered", text)) == (3, 0, 0, 0)
    assert fates(sites.take("unmetered", text)) == (0, 3, 0, 0)
    assert fates(sites.take("unmetered", heading + "S,2,dusk to dawn\n")) == (0, 0, 1, 0)
    assert sites.count(UnmeteredLoad) == 4
    assert sites.problems() == []


@pytest.mark.parametrize(
    ("row", "code"),
    [
        ("NOWHERE,1,dusk to dawn", "hours.no_latitude"),
        ("S,1,at night", "hours.unknown"),
        ("S,1,", "hours.blank"),
        ("S,-1,always", "kw.not_allowed"),
        ("S,,always", "kw.blank"),
        ("X,1,always", "site_id.unknown"),
        ("S,1,always", "site_id.twice"),
    ],
)
def test_what_cannot_be_taken_is_refused(sites, fates, row, code) -> None:
    """Each with its reason; the rest of the file is taken."""
    report = sites.take("unmetered", f"site_id,kw,hours\nS,0.5,always\n{row}\n")
    assert fates(report) == (1, 0, 0, 1)
    assert [refusal.code for refusal in report.refusals] == [code]


def test_a_corrected_place_moves_the_dusk(sites) -> None:
    """Latitude and longitude tell when it is dark."""
    sites.take("unmetered", "site_id,kw,hours\nS,1,dusk to dawn\n")
    sites.take("loads", "meter_id,read_at,kwh\nM,2025-07-01T00:00Z,1\nM,2025-07-01T01:00Z,1\n")
    before = sites.site_load("S").sum()
    sites.take("units", "unit_id,rated_kva,site_id,latitude,longitude\nT,25,S,60,-87.6\n")
    assert sites.site_load("S").sum() < 0.8 * before
    assert sites.problems() == []
