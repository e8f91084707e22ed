"""Which meter hangs on which site: dates, multipliers, and loads derived anew."""

from __future__ import annotations

import numpy as np
import pytest

from tracker.errors import IntakeError
from tracker.intake.site_load import site_loads
from tracker.store.models import MeterConnection, SiteLoadBlock

UNITS = "unit_id,rated_kva,site_id\nT-1,25,S-1\nT-2,25,S-2\n"
METERS = "meter_id,read_at,kw\n"
JULY = 666  #: months since January 1970


@pytest.fixture
def two_sites(new_utility, made_store, tmp_path):
    """Two sites, nothing connected."""
    return new_utility(tmp_path, made_store(("units", UNITS)))


def two_days(meter: str, kw: float) -> str:
    rows = [
        f"{meter},2025-07-{day:02d}T{hour:02d}:00Z,{kw}" for day in (1, 2) for hour in range(24)
    ]
    return METERS + "\n".join(rows) + "\n"


def test_a_meter_may_hang_on_a_unit_or_a_site(two_sites, fates) -> None:
    """Utilities number the one or the other."""
    two_sites.take("loads", two_days("M-1", 0.95) + two_days("M-2", 1.9).partition("\n")[2])
    report = two_sites.take("connections", "meter_id,unit_id,site_id\nM-1,T-1,\nM-2,,S-2\n")
    assert fates(report) == (2, 0, 0, 0)
    np.testing.assert_allclose(two_sites.site_load("S-1"), 1.0, rtol=1e-6)
    np.testing.assert_allclose(two_sites.site_load("S-2"), 2.0, rtol=1e-6)


@pytest.mark.parametrize(
    ("row", "code", "word"),
    [
        ("M,T-9,,,,", "unit_id.unknown", "T-9 is not in the store"),
        ("M,,S-9,,,", "site_id.unknown", "S-9 is in no units file"),
        ("M,,,,,", "unit_id.unknown", "neither"),
        (",T-1,,,,", "meter_id.blank", "blank"),
        ("M,T-1,,2025-07-02,2025-07-02,", "ends_on.too_early", "not after"),
        ("M,T-1,,2025-07-03,2025-07-02,", "ends_on.too_early", "not after"),
        ("M,T-1,,yesterday,,", "starts_on.no_date", "date"),
        ("M,T-1,,,,0", "multiplier.not_allowed", "above 0"),
        ("M,T-1,,,,-40", "multiplier.not_allowed", "above 0"),
        ("M,T-1,,,,nan", "multiplier.not_allowed", "above 0"),
        ("M,T-1,,,,1,0", "power_factor.not_allowed", "above 0, up to 1"),
        ("M,T-1,,,,1,1.01", "power_factor.not_allowed", "above 0, up to 1"),
        ("GOOD,T-2,,,,1,,shop", "class.two_values", "GOOD, which says home"),
    ],
)
def test_what_leads_nowhere_is_refused(two_sites, fates, row, code, word) -> None:
    """A meter hung on the wrong unit heats the wrong unit."""
    heading = "meter_id,unit_id,site_id,starts_on,ends_on,multiplier,power_factor,class\n"
    row += "," * (7 - row.count(","))
    report = two_sites.take("connections", heading + "GOOD,T-2,,,,,,home\n" + row + "\n")
    assert fates(report) == (1, 0, 0, 1)
    (refusal,) = report.refusals
    assert (refusal.line, refusal.code, refusal.text) == (3, code, row)
    assert word in refusal.reason


def test_headings_are_required(two_sites) -> None:
    """A file without any place is none of connections."""
    with pytest.raises(IntakeError, match="unit_id or site_id is missing"):
        two_sites.take("connections", "meter_id,multiplier\nM,1\n")
    with pytest.raises(IntakeError, match="heading meter_id is missing"):
        two_sites.take("connections", "unit_id,multiplier\nT-1,1\n")


@pytest.mark.parametrize("held_before", [True, False])
def test_a_meter_cannot_hang_on_two_sites(two_sites, fates, held_before) -> None:
    """Its energy would be counted twice."""
    heading = "meter_id,site_id,starts_on,ends_on\n"
    rows = ["M,S-1,2025-01-01,\n", "M,S-2,2025-07-01,\n"]
    if held_before:
        two_sites.take("connections", heading + rows.pop(0))
    report = two_sites.take("connections", heading + "".join(rows))
    assert len(report.refusals) == 1
    assert report.refusals[0].code == "meter_id.two_sites"
    assert two_sites.count(MeterConnection) == 1


def test_a_second_import_changes_nothing(two_sites, fates) -> None:
    """The same list arrives every night."""
    text = (
        "meter_id,site_id,starts_on,ends_on,multiplier\nM,S-1,,2025-07-02,40\nM,S-2,2025-07-02,,\n"
    )
    assert fates(two_sites.take("connections", text)) == (2, 0, 0, 0)
    assert fates(two_sites.take("connections", text)) == (0, 2, 0, 0)
    assert two_sites.count(MeterConnection) == 2


def test_dates_and_multiplier_by_hand(two_sites) -> None:
    """A meter of 1.9 kW through a 40:1 transformer at power factor 0.95 is 80 kVA, from the hour
    it was connected to the hour it was not."""
    two_sites.take("loads", two_days("M", 1.9))
    two_sites.take(
        "connections",
        "meter_id,site_id,starts_on,ends_on,multiplier\nM,S-1,,2025-07-02,40\nM,S-2,2025-07-02,,1\n",
    )
    first, second = two_sites.site_load("S-1"), two_sites.site_load("S-2")
    np.testing.assert_allclose(first, [80.0] * 24, rtol=1e-6)
    np.testing.assert_allclose(second, [2.0] * 24, rtol=1e-6)
    assert f"{first.index[-1]:%dT%H}" == "01T23"
    assert f"{second.index[0]:%dT%H}" == "02T00"


def test_dates_are_local_days(two_sites) -> None:
    """In Chicago's summer the day begins at 05:00 UTC."""
    two_sites.take("loads", two_days("M", 1.9))
    two_sites.take(
        "connections",
        "meter_id,site_id,starts_on\nM,S-1,2025-07-02\n",
        timezone="America/Chicago",
    )
    load = two_sites.site_load("S-1")
    assert f"{load.index[0]:%dT%H}" == "02T05"
    assert len(load) == 19


def test_a_corrected_connection_derives_the_load_anew(two_sites, fates) -> None:
    """Floor plan: no new import of readings is needed when a multiplier or a place was wrong."""
    two_sites.take("loads", two_days("M", 1.9))
    heading = "meter_id,site_id,multiplier\n"
    two_sites.take("connections", heading + "M,S-1,1\n")
    np.testing.assert_allclose(two_sites.site_load("S-1"), 2.0, rtol=1e-6)
    assert fates(two_sites.take("connections", heading + "M,S-1,3\n")) == (0, 0, 1, 0)
    np.testing.assert_allclose(two_sites.site_load("S-1"), 6.0, rtol=1e-6)
    assert fates(two_sites.take("connections", heading + "M,S-2,3\n")) == (0, 0, 1, 0)
    assert len(two_sites.site_load("S-1")) == 0
    np.testing.assert_allclose(two_sites.site_load("S-2"), 6.0, rtol=1e-6)
    assert two_sites.count(SiteLoadBlock) == 1
    assert two_sites.problems() == []


def test_the_power_factor_of_a_connection_by_hand(two_sites, fates) -> None:
    """4 kW at 0.8 are 5 kVA; a changed one derives the sites it touches anew, and stands before the one
    given with the readings."""
    two_sites.take("loads", two_days("M", 4.0), power_factor=0.5)
    heading = "meter_id,site_id,power_factor\n"
    two_sites.take("connections", heading + "M,S-1,0.8\n")
    np.testing.assert_allclose(two_sites.site_load("S-1"), 5.0, rtol=1e-6)
    assert fates(two_sites.take("connections", heading + "M,S-1,0.8\n")) == (0, 1, 0, 0)
    assert fates(two_sites.take("connections", heading + "M,S-1,1\n")) == (0, 0, 1, 0)
    np.testing.assert_allclose(two_sites.site_load("S-1"), 4.0, rtol=1e-6)
    assert fates(two_sites.take("connections", heading + "M,S-1,\n")) == (0, 0, 1, 0)
    np.testing.assert_allclose(two_sites.site_load("S-1"), 8.0, rtol=1e-6)
    assert two_sites.problems() == []


def test_a_connection_touches_its_own_sites_alone(two_sites, monkeypatch) -> None:
    """A correction must cost what it touches, not what is held."""
    two_sites.take("loads", two_days("M", 4.0) + two_days("N", 4.0).partition("\n")[2])
    two_sites.take("connections", "meter_id,site_id\nM,S-1\nN,S-2\n")
    derived: list[set[tuple[int, int]]] = []

    def noted(connection, site_months):
        derived.append(set(site_months))
        return site_loads(connection, derived[-1])

    monkeypatch.setattr("tracker.intake.site_load.site_loads", noted)
    two_sites.take("connections", "meter_id,site_id,multiplier\nM,S-1,2\nN,S-2,1\n")
    assert derived == [{(1, JULY)}]


def test_a_silent_meter_is_missed_from_the_day_it_is_connected(two_sites) -> None:
    """A meter that was never read raises the load of its site, also in months that have been read
    already."""
    two_sites.take("loads", two_days("M", 1.9) + two_days("N", 1.9).partition("\n")[2])
    two_sites.take("connections", "meter_id,site_id\nM,S-1\nN,S-1\n")
    np.testing.assert_allclose(two_sites.site_load("S-1"), 4.0, rtol=1e-6)
    two_sites.take("connections", "meter_id,site_id,starts_on\nSILENT,S-1,2025-07-02\n")
    np.testing.assert_allclose(two_sites.site_load("S-1"), [4.0] * 24 + [6.0] * 24, rtol=1e-6)
    assert two_sites.problems() == []


def test_the_class_of_a_meter(two_sites, fates) -> None:
    """A blank leaves what is held; another one is a correction."""
    heading = "meter_id,site_id,class\n"
    assert fates(two_sites.take("connections", heading + "M,S-1,home\n")) == (1, 0, 0, 0)
    assert fates(two_sites.take("connections", heading + "M,S-1,home\n")) == (0, 1, 0, 0)
    assert fates(two_sites.take("connections", heading + "M,S-1,\n")) == (0, 1, 0, 0)
    assert fates(two_sites.take("connections", heading + "M,S-1,shop\n")) == (0, 0, 1, 0)
    assert fates(two_sites.take("connections", heading + "M,S-9,farm\n")) == (0, 0, 0, 1)
    with two_sites.database.reading() as connection:
        found = connection.exec_driver_sql("SELECT customer_class FROM series WHERE name = 'M'")
        assert found.scalar() == "shop"


@pytest.mark.parametrize(
    ("row", "kva"),
    [("T-1,25,1,240,S-1", 24.0), ("T-1,25,3,240,S-1", 41.57), ("T-1,25,1,480,S-1", 48.0)],
)
def test_a_changed_nameplate_derives_the_load_anew(two_sites, row, kva) -> None:
    """Amperes count by the volts and phases of the unit: 100 A at 240 V are 24 kVA, times the root of
    three with three phases."""
    two_sites.take("loads", two_days("M", 100.0).replace(",kw", ",amps_lv"))
    two_sites.take("connections", "meter_id,site_id\nM,S-1\n")
    assert len(two_sites.site_load("S-1")) == 0
    two_sites.take("units", f"unit_id,rated_kva,phases,lv_volts,site_id\n{row}\n")
    np.testing.assert_allclose(two_sites.site_load("S-1"), kva, rtol=1e-4)
    assert two_sites.problems() == []


def test_a_changed_rating_or_placement_looks_at_the_readings_anew(two_sites) -> None:
    """What is impossible behind 25 kVA is possible behind 250; and so it is when such a unit stands
    there from the second day on."""
    two_sites.take("connections", "meter_id,site_id\nM,S-1\n")
    text = two_days("M", 1.0).replace("02T12:00Z,1.0", "02T12:00Z,150")
    two_sites.take("loads", text, power_factor=1)
    assert two_sites.site_load("S-1").max() == 1.0
    two_sites.take("units", "unit_id,rated_kva,site_id\nT-1,250,S-1\n")
    assert two_sites.site_load("S-1").max() == 150.0
    two_sites.take("units", "unit_id,rated_kva,site_id\nT-1,25,S-1\n")
    assert two_sites.site_load("S-1").max() == 1.0
    two_sites.take(
        "units",
        "unit_id,rated_kva,site_id,installed_on,removed_on\n"
        "T-1,25,S-1,,2025-07-02\nT-9,250,S-1,2025-07-02,\n",
    )
    assert two_sites.site_load("S-1").max() == 150.0
    assert two_sites.problems() == []


def test_readings_before_their_connection_count_once_it_is_there(two_sites) -> None:
    """Files come in any order."""
    two_sites.take("loads", two_days("M", 0.95))
    assert len(two_sites.site_load("S-1")) == 0
    two_sites.take("connections", "meter_id,site_id\nM,S-1\n")
    assert len(two_sites.site_load("S-1")) == 48
    assert two_sites.problems() == []


def test_a_moved_unit_takes_its_name_to_the_site_it_stands_at(utility) -> None:
    """`unit_id` in connections means the site where the unit stands at the time."""
    utility.take(
        "units",
        "unit_id,rated_kva,site_id,installed_on,removed_on\n"
        "T,25,S-1,2020-01-01,2025-01-01\nT,25,S-2,2025-01-01,\n",
    )
    utility.take(
        "connections",
        "meter_id,unit_id,starts_on,ends_on\nM-1,T,2021-01-01,2022-01-01\nM-2,T,2025-02-01,\n",
    )
    utility.take("loads", two_days("M-2", 0.95))
    assert len(utility.site_load("S-2")) == 48
    assert len(utility.site_load("S-1")) == 0
