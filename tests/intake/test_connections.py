"""Which meter hangs on which site: dates, multipliers, and loads derived anew."""

from __future__ import annotations

import numpy as np
import pytest

from tracker.errors import IntakeError
from tracker.store.models import MeterConnection, SiteLoadBlock

UNITS = "unit_id,rated_kva,site_id\nT-1,25,S-1\nT-2,25,S-2\n"
METERS = "meter_id,read_at,kw\n"


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
    ],
)
def test_what_leads_nowhere_is_refused(two_sites, fates, row, code, word) -> None:
    """A meter hung on the wrong unit heats the wrong unit."""
    heading = "meter_id,unit_id,site_id,starts_on,ends_on,multiplier\n"
    report = two_sites.take("connections", heading + "GOOD,T-2,,,,\n" + row + "\n")
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
