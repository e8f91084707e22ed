"""Several quantities side by side: reactive readings, amps, and what stands before what."""

from __future__ import annotations

import math

import numpy as np
import pytest

from tracker.store.models import SupersededBlock

UNITS = (
    "unit_id,rated_kva,site_id,phases,hv_volts,lv_volts\nT,25,S,1,7200,240\nT3,300,S3,3,12470,480\n"
)


@pytest.fixture
def sites(new_utility, made_store, tmp_path):
    """A single-phase site S with meters M and N, a three-phase site S3 with meter P."""
    connections = "meter_id,site_id\nM,S\nN,S\nP,S3\n"
    return new_utility(tmp_path, made_store(("units", UNITS), ("connections", connections)))


def text(headings: str, *cells: str, meter: str = "M") -> str:
    rows = "".join(f"{meter},2025-07-01T{hour:02d}:00Z,{cell}\n" for hour, cell in enumerate(cells))
    return f"meter_id,read_at,{headings}\n{rows}"


def alone(utility, name: str) -> None:
    """Take the other meters off the site, so that none is missing."""
    others = "".join(f"{each},S,2000-01-01\n" for each in "MN" if each != name)
    utility.take("connections", f"meter_id,site_id,ends_on\n{others}")


@pytest.mark.parametrize("headings", ["kwh,kvarh", "kw,kvar", "kwh,kvar", "kvarh,kwh"])
def test_kva_is_the_vector_sum_where_reactive_readings_stand_beside(sites, fates, headings) -> None:
    """3-4-5: the plainest right triangle; hourly, energy and mean power are the same figure."""
    alone(sites, "M")
    cells = "4,3" if headings.startswith("kvar") else "3,4"
    assert fates(sites.take("loads", text(headings, cells, cells))) == (2, 0, 0, 0)
    np.testing.assert_allclose(sites.site_load("S"), 5.0, rtol=1e-6)
    assert sites.problems() == []


def test_a_reactive_reading_that_is_missing_leaves_the_power_factor(sites, fates) -> None:
    """Where it stands beside, it is used; where not, the power factor is, and the share is told."""
    alone(sites, "M")
    report = sites.take("loads", text("kw,kvar", "3,4", "3,", "3,4"), power_factor=0.6)
    assert fates(report) == (3, 0, 0, 0)
    np.testing.assert_allclose(sites.site_load("S"), 5.0, rtol=1e-6)
    assert "kVA of 1 readings by the power factor 0.6" in report.notes


def test_reactive_power_of_meters_is_summed_as_vectors(sites) -> None:
    """A capacitor at one customer relieves what the other draws: 3 + 1 kW and 4 − 1 kvar are 5 kVA."""
    sites.take("loads", text("kw,kvar", "3,4", "3,4"))
    sites.take("loads", text("kw,kvar", "1,-1", "1,-1", meter="N"))
    np.testing.assert_allclose(sites.site_load("S"), 5.0, rtol=1e-6)


def test_export_counts_by_the_magnitude_of_the_net(sites) -> None:
    """Two roofs that export 6 kW against 1 kW of use load the unit with 5 kW."""
    sites.take("loads", text("kw", "-6", "-6"), power_factor=1)
    sites.take("loads", text("kw", "1", "1", meter="N"), power_factor=1)
    np.testing.assert_allclose(sites.site_load("S"), 5.0, rtol=1e-6)


@pytest.mark.parametrize(
    ("meter", "site", "heading", "amps", "kva"),
    [
        ("M", "S", "amps_lv", 100, 100 * 240 / 1000),
        ("M", "S", "amps_hv", 2, 2 * 7200 / 1000),
        ("P", "S3", "amps_lv", 200, math.sqrt(3) * 480 * 200 / 1000),
        ("P", "S3", "amps_hv", 10, math.sqrt(3) * 12470 * 10 / 1000),
    ],
)
def test_amps_by_the_rated_voltage_of_their_side(sites, meter, site, heading, amps, kva) -> None:
    """S = V I, and √3 V I for three phases (common practice)."""
    if site == "S":
        alone(sites, "M")
    sites.take("loads", text(heading, str(amps), str(amps), meter=meter))
    np.testing.assert_allclose(sites.site_load(site), kva, rtol=1e-6)


def test_high_and_low_side_agree_through_the_turns_ratio(sites) -> None:
    """The same load seen from either side: I_hv = I_lv / (7200/240)."""
    alone(sites, "M")
    sites.take("loads", text("amps_lv", "90", "90"))
    low = sites.site_load("S").tolist()
    sites.take("connections", "meter_id,site_id,ends_on\nM,S,2000-01-01\n")
    sites.take("connections", "meter_id,site_id,starts_on\nH,S,2000-01-01\n")
    sites.take("loads", text("amps_hv", "3", "3", meter="H"))
    np.testing.assert_allclose(sites.site_load("S"), low, rtol=1e-6)


def test_what_is_measured_stands_before_what_is_worked_out(sites, fates) -> None:
    """kVA before amps before kW; all of them are kept."""
    alone(sites, "M")
    report = sites.take(
        "loads", text("kw,kva,amps_lv", "3,7,100", "3,,100", "3,,"), power_factor=1, interval=60
    )
    assert fates(report) == (3, 0, 0, 0)
    np.testing.assert_allclose(sites.site_load("S"), [7.0, 24.0, 3.0], rtol=1e-6)
    assert sites.readings("M", "kw").tolist() == [3, 3, 3]


def test_a_row_is_one_reading_whatever_it_holds(sites, fates) -> None:
    """Its fate is the weightiest of its cells; a bad cell refuses the row."""
    alone(sites, "M")
    sites.take("loads", text("kw,kvar", "3,4", "3,4", "3,4"))
    again = sites.take("loads", text("kw,kvar", "3,4", "3,5", "3,x", "3,4"))
    assert fates(again) == (1, 1, 1, 1)
    refusal = again.refusals[0]
    assert (refusal.line, refusal.column, refusal.code) == (4, "kvar", "value.not_a_number")
    assert sites.count(SupersededBlock) == 1


def test_a_blank_row_is_refused(sites, fates) -> None:
    """It has no quantity at all."""
    report = sites.take("loads", text("kw,kvar", "3,4", ",", "3,4"), interval=60)
    assert fates(report) == (2, 0, 0, 1)
    assert report.refusals[0].code == "value.blank"


def test_quantity_chooses_among_several_columns(sites) -> None:
    """To leave a column out on purpose."""
    alone(sites, "M")
    report = sites.take("loads", text("kw,kva", "3,9", "3,9"), quantity="kw", power_factor=1)
    np.testing.assert_allclose(sites.site_load("S"), 3.0)
    assert report.left_out == ["kva"]


def test_the_assumed_share_is_told(sites) -> None:
    """Figures from an assumed power factor are estimates; who reads them must know how many."""
    report = sites.take("loads", text("kw", "3", "3"))
    assert "kVA of 2 readings by the assumed power factor 0.95" in report.notes
    sites.take("connections", "meter_id,site_id,power_factor\nN,S,0.8\n")
    report = sites.take("loads", text("kw", "3", "3", meter="N"))
    assert "kVA of 2 readings by its meter's own power factor" in report.notes
