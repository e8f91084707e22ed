"""The replacement priority list: its order, its reasons, and the sizes it suggests."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from tracker.assessment.run import assess
from tracker.assessment.trace import unit_trace
from tracker.errors import InputError
from tracker.fleet.nameplate import Nameplate, thermal_parameters
from tracker.planning.priority import PRIORITY_COLUMNS, priority_list
from tracker.thermal import simulate

#: Preferred ratings, seen in a trade reference that attributes them to IEEE C57.12.00.
SINGLE_PHASE_KVA = (5, 10, 15, 25, 37.5, 50, 75, 100, 167, 250, 333, 500)
THREE_PHASE_KVA = (15, 30, 45, 75, 112.5, 150, 225, 300, 500, 750, 1000, 1500, 2000, 2500)
LIMIT_C = 140.0


@pytest.fixture
def listed(summer) -> pd.DataFrame:
    """The list of the summer's fleet, by unit."""
    return priority_list(summer.database).set_index("unit_id")


def holds(database, unit_id: str, rating_kva: float, phases: int) -> bool:
    """Say by the readable form whether a rating would do for a unit's own load and weather."""
    trace = unit_trace(database, unit_id)
    run = simulate(
        trace.load_kva[np.newaxis],
        trace.air_temp_c[np.newaxis],
        thermal_parameters([Nameplate(rating_kva, phases)]),
        trace.step_h,
    )
    on = run.counted[0]
    return run.hot_spot_c[0, on].max() <= LIMIT_C and run.aging_factor[0, on].mean() <= 1.0


def test_columns_are_those_of_the_contract(listed) -> None:
    """Section 4: other programs read the list by these names, in this order."""
    wanted = (
        "rank, unit_id, site_id, feeder, rated_kva, peak_load_pct, peak_hot_spot_c, "
        "peak_hot_spot_at, peak_top_oil_c, hours_over_rating, hours_over_hot_spot_limit, "
        "aging_factor, life_used_pct, coverage_pct, suggested_kva, reasons"
    )
    assert list(PRIORITY_COLUMNS) == wanted.split(", ")
    assert list(listed.reset_index().columns[:2]) == ["unit_id", "rank"]


def test_the_most_urgent_comes_first_and_ties_break_by_id(listed) -> None:
    """The list is the same on every run, and units nobody can judge come last."""
    assert list(listed.index) == ["HOT", "WARM", "TWIN-A", "TWIN-B", "COOL", "DARK"]
    assert listed["rank"].tolist() == [1, 2, 3, 4, 5, 6]


def test_the_suggested_size_is_the_smallest_that_holds(summer, listed) -> None:
    """By brute force: every preferred rating is run through the readable form."""
    sized = listed[listed["suggested_kva"].notna()]
    assert "HOT" in sized.index
    for unit_id, row in sized.iterrows():
        fitting = [kva for kva in SINGLE_PHASE_KVA if holds(summer.database, unit_id, kva, 1)]
        assert row["suggested_kva"] == fitting[0]
        assert row["suggested_kva"] > row["rated_kva"]


def test_no_size_is_suggested_for_what_is_fine(listed) -> None:
    """Nothing needs to be replaced that is within its limits."""
    assert listed.loc[["COOL", "TWIN-A", "DARK"], "suggested_kva"].isna().all()


@pytest.mark.parametrize(("phases", "ratings"), [(1, SINGLE_PHASE_KVA), (3, THREE_PHASE_KVA)])
def test_sizes_by_number_of_phases(utility, hourly_csv, phases, ratings) -> None:
    """Three-phase units come in other sizes; found by brute force for a range of loads."""
    loads = {f"U-{kva}": float(kva) for kva in (12, 40, 95, 210, 480)}
    utility.take(
        "units",
        "unit_id,rated_kva,phases\n" + "".join(f"{unit},5,{phases}\n" for unit in loads),
    )
    shape = 0.6 + 0.4 * np.sin(np.arange(4 * 24) * 2 * np.pi / 24)
    for unit, kva in loads.items():
        utility.take("loads", hourly_csv(unit, kva * shape))
    utility.take(
        "weather", hourly_csv("W", 32 + 0 * shape, heading="station_id,read_at,air_temp_c")
    )
    assess(utility.database)
    listed = priority_list(utility.database).set_index("unit_id")
    for unit in loads:
        fitting = [kva for kva in ratings if holds(utility.database, unit, kva, phases)]
        assert listed.at[unit, "suggested_kva"] == fitting[0]


def test_a_load_beyond_all_sizes_is_said_so(utility, hourly_csv) -> None:
    """No rating helps: the load has to be divided."""
    utility.take("units", "unit_id,rated_kva\nBIG,100\n")
    utility.take("loads", hourly_csv("BIG", np.full(72, 2000.0)))
    utility.take(
        "weather", hourly_csv("W", np.full(72, 30.0), heading="station_id,read_at,air_temp_c")
    )
    assess(utility.database)
    (row,) = priority_list(utility.database).to_dict("records")
    assert pd.isna(row["suggested_kva"])
    assert row["reasons"].endswith("no preferred rating is enough: divide the load")


def test_reasons_say_what_is_wrong_in_words_and_figures(listed) -> None:
    """Whoever signs the order reads the reason, not the columns."""
    hot = listed.loc["HOT"]
    assert hot["reasons"] == (
        f"hot spot over 140 °C for {hot['hours_over_hot_spot_limit']:.0f} h, "
        f"up to {hot['peak_hot_spot_c']:.0f} °C; "
        f"insulation aging {hot['aging_factor']:.3g} times as fast as normal; "
        f"over rating for {hot['hours_over_rating']:.0f} h, up to {hot['peak_load_pct']:.0f} %"
    )
    assert listed.at["WARM", "reasons"].startswith("over rating for")
    assert listed.at["COOL", "reasons"] == "within limits"
    assert listed.at["DARK", "reasons"] == (
        "no load or no air temperature is known: cannot be judged"
    )


def test_hours_are_written_out_however_many(utility, hourly_csv) -> None:
    """Two years of overload are 17,000 hours, not 1.7e+04."""
    n = 17_544
    utility.take("units", "unit_id,rated_kva\nT,25\n")
    utility.take("loads", hourly_csv("T", np.full(n, 26.0), "2023-01-01"))
    air = hourly_csv("W", np.full(n, 20.0), "2023-01-01", heading="station_id,read_at,air_temp_c")
    utility.take("weather", air)
    assess(utility.database)
    assert "over rating for 17,520 h" in priority_list(utility.database)["reasons"][0]


def test_thin_data_is_ranked_apart(utility, hourly_csv) -> None:
    """A week of heat out of a month of silence must not push aside what is known well."""
    utility.take("units", "unit_id,rated_kva\nFULL,25\nTHIN,25\n")
    utility.take("loads", hourly_csv("FULL", np.full(30 * 24, 20.0)))
    utility.take("loads", hourly_csv("THIN", np.full(7 * 24, 60.0)))
    air = hourly_csv("W", np.full(30 * 24, 30.0), heading="station_id,read_at,air_temp_c")
    utility.take("weather", air)
    assess(utility.database)
    listed = priority_list(utility.database)
    assert listed["unit_id"].tolist() == ["FULL", "THIN"]
    said = "ranked apart: only 20 % of its energy is measured; hot"
    assert listed["reasons"][1].startswith(said)


def test_the_list_needs_an_assessment(utility) -> None:
    """And says which command makes one."""
    with pytest.raises(InputError, match="Run `tracker assess` first"):
        priority_list(utility.database)


def test_a_unit_that_was_removed_is_no_candidate(utility) -> None:
    """It stands nowhere any more: nobody can replace it, however hot it ran."""
    utility.take(
        "units",
        utility.file(
            "unit_id,rated_kva,site_id,installed_on,removed_on\n"
            "OLD,10,S,,2025-07-05\nNEW,25,S,2025-07-05,\n"
        ),
    )
    stamps = pd.date_range("2025-07-01", "2025-07-10", freq="h", tz="UTC", inclusive="left")
    owner = np.where(stamps < pd.Timestamp("2025-07-05", tz="UTC"), "OLD", "NEW")
    utility.take("loads", pd.DataFrame({"unit_id": owner, "read_at": stamps, "kva": 22.0}))
    utility.take("weather", pd.DataFrame({"read_at": stamps, "air_temp_c": 30.0}))
    assess(utility.database)
    listed = priority_list(utility.database).set_index("unit_id")
    assert list(listed.index) == ["NEW", "OLD"]
    assert listed.loc["OLD", "reasons"] == "removed on 2025-07-05"
    assert np.isnan(listed.loc["OLD", "suggested_kva"])
    assert listed.loc["OLD", "peak_load_pct"] == pytest.approx(220.0)
