"""Coverage: the measured share of a unit's energy, over the hours it stood somewhere."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sqlalchemy import select, update

from tracker.assessment.coverage import measured_energy_share
from tracker.assessment.run import assess
from tracker.assessment.trace import unit_trace
from tracker.fleet.nameplate import Nameplate, thermal_parameters
from tracker.planning.priority import priority_list
from tracker.planning.standing import why_apart
from tracker.store.blocks import Quality, pack, unpack
from tracker.store.measured import ALL_MEASURED, measured_blocks
from tracker.store.models import Site, SiteLoadBlock
from tracker.store.results import (
    APART,
    RANKED,
    WITHOUT_FIGURES,
    hotter_units,
    latest_assessment,
    ranking_page,
)
from tracker.thermal import simulate

DAY = 24
AIR = "read_at,air_temp_c"


def coverage_pct(database, unit_id: str) -> float:
    assess(database)
    with database.reading() as connection:
        newest = latest_assessment(connection)
        rows = ranking_page(connection, newest.key).rows
    return next(row["coverage_pct"] for row in rows if row["unit_id"] == unit_id)


def set_measured(database, site_id: str, share, flag: Quality = Quality.FILLED) -> None:
    """Say of a site's load, from its first hour on, which share of each value was measured."""
    share = np.asarray(share, dtype=float)
    with database.writing() as connection:
        rows = connection.execute(
            select(SiteLoadBlock.site_key, SiteLoadBlock.month, SiteLoadBlock.payload)
            .join(Site, Site.id == SiteLoadBlock.site_key)
            .where(Site.site_id == site_id)
            .order_by(SiteLoadBlock.month)
        ).all()
        for row in rows:
            values, flags = (part.copy() for part in unpack([row.payload]))
            held = np.flatnonzero(flags[0])
            part, share = share[: len(held)], share[len(held) :]
            measured = np.full(values.shape[1], ALL_MEASURED, dtype=np.uint8)
            measured[held[: len(part)]] = np.rint(part * ALL_MEASURED)
            flags[0, held[: len(part)][part < 1]] |= int(flag)
            connection.execute(
                update(SiteLoadBlock)
                .where(SiteLoadBlock.site_key == row.site_key, SiteLoadBlock.month == row.month)
                .values(payload=pack(values, flags, 60)[0], measured=measured.tobytes())
            )


@pytest.fixture
def week(utility, hourly_csv):
    """One unit, T, with seven days of load, and its weather."""
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    utility.take("loads", hourly_csv("T", 5 + np.arange(7.0 * DAY) % 20))
    utility.take("weather", hourly_csv("W", np.full(7 * DAY, 25.0), heading=f"station_id,{AIR}"))
    return utility


def test_coverage_weighs_by_energy_and_counts_no_warm_up(week) -> None:
    """By hand: six days count; in the second half of them half of each load was measured."""
    load = 5 + np.arange(7 * DAY) % 20
    share = np.where(np.arange(7 * DAY) < 4 * DAY, 1.0, 0.5)
    share[:DAY] = 0.0  # the first day warms the state up, and is nobody's figure
    set_measured(week.database, "T", share)
    counted = slice(DAY, None)
    wanted = 100 * (share * load)[counted].sum() / load[counted].sum()
    assert coverage_pct(week.database, "T") == pytest.approx(wanted, rel=1e-6)


def test_missing_hours_and_estimated_energy_multiply(utility, hourly_csv) -> None:
    """Contract: measured share of the counted energy, times counted over expected hours."""
    load = np.full(7 * DAY, 20.0)
    load[60:70] = np.nan
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    utility.take("loads", hourly_csv("T", load))
    air = hourly_csv("W", np.full(7 * DAY, 25.0), heading=f"station_id,{AIR}")
    utility.take("weather", air)
    set_measured(utility.database, "T", np.full(7 * DAY, 0.75))
    hours = (6 * DAY - 10) / (6 * DAY)
    assert coverage_pct(utility.database, "T") == pytest.approx(100 * 0.75 * hours)


@pytest.mark.parametrize("share", [0.0, 0.5])
def test_without_energy_coverage_is_by_hours(utility, hourly_csv, share) -> None:
    """Nothing was used, so none of it was made up: the hours alone tell."""
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    utility.take("loads", hourly_csv("T", np.zeros(3 * DAY)))
    air = hourly_csv("W", np.full(3 * DAY, 25.0), heading=f"station_id,{AIR}")
    utility.take("weather", air)
    set_measured(utility.database, "T", np.full(3 * DAY, share))
    assert coverage_pct(utility.database, "T") == 100.0


def test_a_moved_unit_is_covered_by_each_site_while_it_stood_there(utility, hourly_csv) -> None:
    """Only the second place was spread from monthly energy: half of the energy that counts."""
    utility.take(
        "units",
        "unit_id,rated_kva,site_id,installed_on,removed_on\n"
        "T,25,S-1,,2025-07-04\nT,25,S-2,2025-07-04,\nX,25,S-1,2025-07-04,\n",
    )
    utility.take("connections", "meter_id,site_id\nA,S-1\nB,S-2\n")
    for meter in "AB":
        load = hourly_csv(meter, np.full(5 * DAY, 10.0), heading="meter_id,read_at,kva")
        utility.take("loads", load)
    air = hourly_csv("W", np.full(5 * DAY, 25.0), heading=f"station_id,{AIR}")
    utility.take("weather", air)
    set_measured(utility.database, "S-2", np.zeros(5 * DAY), Quality.SPREAD)
    assert coverage_pct(utility.database, "T") == pytest.approx(50.0)
    trace = unit_trace(utility.database, "T")
    assert trace.measured_share.tolist() == [1.0] * 3 * DAY + [0.0] * 2 * DAY
    spread = (trace.load_flags & Quality.SPREAD) != 0
    assert spread.tolist() == [False] * 3 * DAY + [True] * 2 * DAY


def test_a_unit_of_finer_step_shares_the_site_values(utility, hourly_csv) -> None:
    """Weather at half hours runs the unit at half hours; each half has its hour's share."""
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    load = 10.0 + np.arange(3 * DAY) % 7
    utility.take("loads", hourly_csv("T", load))
    half_hours = hourly_csv("W", np.full(6 * DAY, 25.0), heading=f"station_id,{AIR}", freq="30min")
    utility.take("weather", half_hours)
    share = np.arange(3 * DAY) % 2 / 2
    set_measured(utility.database, "T", share)
    counted = slice(DAY, None)
    wanted = 100 * (share * load)[counted].sum() / load[counted].sum()
    assert coverage_pct(utility.database, "T") == pytest.approx(wanted)


@settings(deadline=None)  # the first example compiles
@given(st.data())
def test_what_counts_is_what_the_model_counts(data) -> None:
    """Property: over random holes the energies are those of the intervals that the readable form
    counts."""
    step_h = data.draw(st.sampled_from([1.0, 0.5]))
    n_time = 200
    rng = np.random.default_rng(data.draw(st.integers(0, 2**32 - 1)))
    load = rng.uniform(0.0, 30.0, (1, n_time)).astype(np.float32)
    air = np.full((1, n_time), 25.0, dtype=np.float32)
    for series in (load, air):
        for _ in range(data.draw(st.integers(0, 4))):
            start, length = data.draw(st.integers(0, n_time)), data.draw(st.integers(1, 70))
            series[0, start : start + length] = np.nan
    share = rng.integers(0, 201, (1, n_time)).astype(np.uint8)
    run = simulate(load, air, thermal_parameters([Nameplate(25.0)]), step_h)
    on = run.counted[0]
    energy = load[0, on].astype(float).sum()
    measured = (load[0, on].astype(float) * share[0, on] / 200).sum()
    wanted = measured / energy if energy > 0 else 1.0
    first = np.array([0])
    got = measured_energy_share(load, air, first, first, share, step_h)
    assert got[0] == pytest.approx(wanted, rel=1e-9)


def test_units_measured_whole_have_no_shares_to_read(week) -> None:
    """What costs nothing is not there: no block is fetched for a fleet that is read in full."""
    with week.database.reading() as connection:
        keys = list(connection.scalars(select(SiteLoadBlock.site_key)))
        assert measured_blocks(connection, keys, (0, 10_000)) == []


def test_the_fingerprint_knows_the_shares(week) -> None:
    """Another coverage is another figure, so it is of other data."""

    def fingerprint() -> str:
        assess(week.database)
        with week.database.reading() as connection:
            return latest_assessment(connection).data_fingerprint

    set_measured(week.database, "T", np.full(7 * DAY, 0.9))
    before = fingerprint()
    assert fingerprint() == before
    set_measured(week.database, "T", np.full(7 * DAY, 0.8))
    assert fingerprint() != before


# --- Ranked apart ---------------------------------------------------------------------------------


@pytest.fixture
def mixed(utility, hourly_csv):
    """HOT is short of measured energy, EDGE just not; COOL and WARM are whole; DARK has no load."""
    names = ("HOT", "WARM", "COOL", "EDGE", "DARK")
    utility.take("units", "unit_id,rated_kva\n" + "".join(f"{name},25\n" for name in names))
    for name, kva in (("HOT", 40.0), ("WARM", 30.0), ("COOL", 10.0), ("EDGE", 20.0)):
        utility.take("loads", hourly_csv(name, np.full(4 * DAY, kva)))
    air = hourly_csv("W", np.full(4 * DAY, 25.0), heading=f"station_id,{AIR}")
    utility.take("weather", air)
    set_measured(utility.database, "HOT", np.full(4 * DAY, 0.795))
    set_measured(utility.database, "EDGE", np.full(4 * DAY, 0.8))
    assess(utility.database)
    return utility


@pytest.mark.parametrize("way", ["asc", "desc"])
@pytest.mark.parametrize("column", ["peak_hot_spot_c", "unit_id", "coverage_pct", "rated_kva"])
def test_units_short_of_data_come_after_all_others(mixed, column, way) -> None:
    """Whatever the order: a figure made of guesses must not push aside one that was measured.
    At exactly 80 % a unit stands among the others."""
    with mixed.database.reading() as connection:
        key = latest_assessment(connection).key
        rows = ranking_page(connection, key, sort=[(column, way)]).rows
        pages = [
            ranking_page(connection, key, start=place, stop=place + 2, sort=[(column, way)]).rows
            for place in (0, 2, 4)
        ]
    assert [row for page in pages for row in page] == rows
    assert {row["unit_id"] for row in rows[:3]} == {"WARM", "COOL", "EDGE"}
    assert [row["unit_id"] for row in rows[3:]] == ["HOT", "DARK"]
    assert [row["standing"] for row in rows] == [RANKED] * 3 + [APART, WITHOUT_FIGURES]


def test_a_unit_apart_says_why_and_takes_nobodys_place(mixed) -> None:
    """The reason in words; the hottest that is known well is the first."""
    with mixed.database.reading() as connection:
        key = latest_assessment(connection).key
        rows = {row["unit_id"]: row for row in ranking_page(connection, key).rows}
        assert hotter_units(connection, key, "WARM") == 0
        assert hotter_units(connection, key, "COOL") == 2
    assert why_apart(rows["HOT"]) == "only 79 % of its energy is measured"
    assert why_apart(rows["EDGE"]) is why_apart(rows["DARK"]) is None
    listed = priority_list(mixed.database)
    assert listed["unit_id"].tolist()[-2:] == ["HOT", "DARK"]
    assert "ranked apart: only 79 % of its energy is measured" in listed["reasons"].tolist()[-2]
