"""Doubtful connections: what is planted is found with its evidence, and little else is."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest

from tracker.api import TransformerStore
from tracker.demo.larkmoor import write_larkmoor
from tracker.errors import InputError
from tracker.planning.doubt_settings import DoubtSettings
from tracker.planning.doubtful import (
    COUNT,
    DOUBT_COLUMNS,
    IDLE,
    IMPOSSIBLE,
    MOVED,
    doubtful_connections,
    doubts_table,
)
from tracker.planning.moved_meters import Band
from tracker.planning.places import load_exceeded
from tracker.reports.tables import csv_text

N_DAY = 14
HOUR = np.arange(24 * N_DAY)
#: A day that peaks at 1 and needs about half of it in the mean.
EVENING = 0.3 + 0.7 * np.exp(-(((HOUR % 24 - 18) / 3.0) ** 2))

#: A feeder of 16 ordinary sites: four homes of 4 kVA on 25 kVA.
ORDINARY = {f"U-{n:02d}": (25.0, [4.0 + 0.1 * (n % 5)] * 4) for n in range(16)}


def frames(sites, *, feeder="F-1", customers=None, places=None):
    """Return register, connections and loads of sites: {unit: (rated kVA, peaks of its meters)}."""
    stamps = pd.date_range("2025-07-01", periods=len(HOUR), freq="h", tz="UTC")
    units, connections, loads = [], [], []
    for nth, (unit, (rated_kva, peaks)) in enumerate(sites.items()):
        latitude, longitude = (places or {}).get(unit, (38.0 + 0.002 * nth, -99.0))
        units.append(
            {
                "unit_id": unit,
                "site_id": f"S-{unit}",
                "feeder": feeder,
                "rated_kva": rated_kva,
                "customers": (customers or {}).get(unit, len(peaks)),
                "latitude": latitude,
                "longitude": longitude,
            }
        )
        for m, peak_kva in enumerate(peaks):
            connections.append({"meter_id": f"M-{unit}-{m}", "site_id": f"S-{unit}"})
            shape = np.roll(EVENING, m)
            loads.append(
                pd.DataFrame(
                    {"meter_id": f"M-{unit}-{m}", "read_at": stamps, "kva": peak_kva * shape}
                )
            )
    return pd.DataFrame(units), pd.DataFrame(connections), pd.concat(loads)


def take(utility, sites, **options):
    """Take sites in, without what the register does not say."""
    units, connections, loads = frames(sites, **options)
    utility.take("units", units.dropna(axis=1, how="all"))
    utility.take("connections", connections)
    utility.take("loads", loads)


def doubts(utility, **options) -> pd.DataFrame:
    return doubts_table(doubtful_connections(utility.database, **options))


def test_an_ordinary_feeder_gives_no_hint(utility) -> None:
    """Whoever is sent out for nothing will not go again."""
    take(utility, ORDINARY)
    found = doubts(utility)
    assert found.empty
    assert tuple(found) == DOUBT_COLUMNS


# --- A meter that may hang elsewhere --------------------------------------------------------------


def test_a_meter_written_down_next_door_is_named_with_both_sites(utility) -> None:
    """A shop of 24 kVA hangs at U-B and is written down at U-A, whose customers are four."""
    sites = ORDINARY | {"U-A": (25.0, [4.0, 4.1, 4.2, 4.3, 24.0]), "U-B": (37.5, [4.0])}
    take(utility, sites, customers={"U-A": 4, "U-B": 2})
    row = doubts(utility).iloc[0]
    assert (row["doubt"], row["meter_id"]) == (MOVED, "M-U-A-4")
    assert (row["site_id"], row["other_site_id"]) == ("S-U-A", "S-U-B")
    assert (row["unit_id"], row["other_unit_id"]) == ("U-A", "U-B")
    assert row["peak_load_pct"] > 120 > 90 > row["peak_load_if_moved_pct"]
    assert row["other_peak_load_pct"] < 20 < 50 < row["other_peak_load_if_moved_pct"]
    for words in ("M-U-A-4 peaks at 24", "meters per kVA", "km away", "Were M-U-A-4 at S-U-B"):
        assert words in row["evidence"]


def test_peaks_after_a_move_are_those_of_the_loads_hour_by_hour(utility) -> None:
    """By hand from the same arrays: not the difference of two peaks, which fall at other hours."""
    sites = ORDINARY | {"U-A": (25.0, [4.0, 4.0, 4.0, 4.0, 24.0]), "U-B": (37.5, [4.0])}
    take(utility, sites, customers={"U-A": 4, "U-B": 2})
    row = doubts(utility).iloc[0]
    share = DoubtSettings().peak_share
    shapes = [np.roll(EVENING, m) for m in range(5)]
    homes = sum(4.0 * shape for shape in shapes[:4])
    there = 4.0 * shapes[0] + 24.0 * shapes[4]
    expected = 100 * load_exceeded(homes + 24.0 * shapes[4], share) / 25.0
    assert row["peak_load_pct"] == pytest.approx(expected, rel=1e-5)
    assert row["peak_load_if_moved_pct"] == pytest.approx(
        100 * load_exceeded(homes, share) / 25.0, rel=1e-5
    )
    assert row["other_peak_load_if_moved_pct"] == pytest.approx(
        100 * load_exceeded(there, share) / 37.5, rel=1e-5
    )


def test_two_meters_written_down_at_each_others_site_are_an_exchange(utility) -> None:
    """The register's customers agree with the meters of both sites, so one alone cannot have moved."""
    sites = ORDINARY | {"U-A": (25.0, [4.0, 4.1, 4.2, 24.0]), "U-B": (37.5, [4.0])}
    take(utility, sites)
    found = doubts(utility)
    moved = found[found["doubt"] == MOVED]
    assert moved["meter_id"].tolist() == ["M-U-A-3", "M-U-B-0"]
    assert moved["other_site_id"].tolist() == ["S-U-B", "S-U-A"]
    assert moved["rank"].tolist() == [1, 2]
    assert moved.iloc[0]["peak_load_pct"] == moved.iloc[1]["other_peak_load_pct"]


def test_the_only_meter_of_a_site_may_be_written_down_next_door(utility) -> None:
    """The site is left without a meter, though the register counts a customer there."""
    sites = ORDINARY | {"U-A": (25.0, [4.0, 4.1, 4.2, 4.3, 24.0]), "U-B": (37.5, [])}
    take(utility, sites, customers={"U-A": 4, "U-B": 1})
    found = doubts(utility)
    row = found.iloc[0]
    assert (row["doubt"], row["meter_id"], row["other_site_id"]) == (MOVED, "M-U-A-4", "S-U-B")
    assert row["other_peak_load_pct"] == 0.0
    assert found["unit_id"].tolist() == ["U-A", "U-B"]
    assert found["doubt"].tolist()[1] == IDLE


@pytest.mark.parametrize("why", ["another feeder", "too far"])
def test_only_neighbours_are_tried(utility, why) -> None:
    """A meter is written down at the wrong pole of a street, not of a county."""
    lone = {"U-B": (37.5, [4.0])}
    sites = ORDINARY | {"U-A": (25.0, [4.0, 4.1, 4.2, 4.3, 24.0])}
    take(utility, sites, customers={"U-A": 4})
    take(
        utility,
        lone,
        customers={"U-B": 2},
        feeder="F-2" if why == "another feeder" else "F-1",
        places={"U-B": (38.0, -99.0) if why == "another feeder" else (39.0, -99.0)},
    )
    assert MOVED not in doubts(utility)["doubt"].tolist()


def test_without_places_the_feeder_is_the_neighbourhood(utility) -> None:
    """Many registers know no coordinates."""
    sites = ORDINARY | {"U-A": (25.0, [4.0, 4.1, 4.2, 4.3, 24.0]), "U-B": (37.5, [4.0])}
    nowhere = dict.fromkeys(sites, (math.nan, math.nan))
    take(utility, sites, customers={"U-A": 4, "U-B": 2}, places=nowhere)
    row = doubts(utility).iloc[0]
    assert (row["meter_id"], row["other_site_id"]) == ("M-U-A-4", "S-U-B")
    assert "km away" not in row["evidence"]


def test_a_small_store_is_held_against_common_practice(utility) -> None:
    """Two units show no band of their own; a peak of some 40 to 110 % of the rating is usual."""
    sites = {"U-A": (25.0, [4.0, 4.1, 4.2, 4.3, 24.0]), "U-B": (37.5, [4.0])}
    take(utility, sites, customers={"U-A": 4, "U-B": 2})
    found = doubts(utility)
    assert found["meter_id"].tolist() == ["M-U-A-4"]


def test_a_unit_measured_as_a_whole_has_no_meter_to_move(utility, hourly_csv) -> None:
    """Its load is no sum of meters."""
    sites = ORDINARY | {"U-A": (25.0, [4.0, 4.1, 4.2, 4.3, 24.0]), "U-B": (37.5, [4.0])}
    take(utility, sites, customers={"U-A": 4, "U-B": 2})
    utility.take("loads", hourly_csv("U-A", 40.0 * EVENING))
    assert MOVED not in doubts(utility)["doubt"].tolist()


# --- The other doubts -----------------------------------------------------------------------------


@pytest.mark.parametrize(("n_day", "n_hour", "found"), [(3, 6, 1), (2, 6, 0), (5, 5, 0)])
def test_a_load_no_unit_carries_for_hours_on_end(utility, n_day, n_hour, found) -> None:
    """Over 200 % of the rating for six hours on three days: a fuse would be gone, or the oil."""
    load = np.full(24 * N_DAY, 10.0)
    for day in range(n_day):
        load[24 * (2 + day) + 10 : 24 * (2 + day) + 10 + n_hour] = 51.0
    utility.take("units", "unit_id,rated_kva,site_id\nT,25,S\n")
    utility.take("connections", "meter_id,site_id\nM,S\n")
    stamps = pd.date_range("2025-07-01", periods=len(load), freq="h", tz="UTC")
    utility.take("loads", pd.DataFrame({"meter_id": "M", "read_at": stamps, "kva": load}))
    rows = doubts(utility)
    assert (rows["doubt"] == IMPOSSIBLE).sum() == found
    if found:
        assert (
            "200 % of the rating for 6 h or more on 3 days, 6 h on 2025-07-03"
            in (rows["evidence"].iloc[0])
        )


def test_customers_without_load(utility) -> None:
    """A street that uses nothing is written down somewhere else; an empty plot is none, and a unit
    whose meters never reported is not known to be idle."""
    sites = ORDINARY | {"IDLE": (25.0, [0.01, 0.01, 0.0]), "BARE": (25.0, []), "PLOT": (25.0, [])}
    take(utility, sites, customers={"BARE": 5, "PLOT": 0})
    utility.take("units", "unit_id,rated_kva,feeder,customers\nSILENT,25,F-1,3\n")
    utility.take("connections", "meter_id,unit_id\nM-SILENT,SILENT\n")
    found = doubts(utility).set_index("unit_id")
    idle = found[found["doubt"] == IDLE]
    assert sorted(idle.index) == ["BARE", "IDLE"]
    assert "5 customers in the register, and no meter is connected" in idle.at["BARE", "evidence"]
    assert "3 meters on 25 kVA" in idle.at["IDLE", "evidence"]
    assert found["peak_load_pct"].isna().tolist() == (found.index == "BARE").tolist()


def test_a_feeder_without_connections_is_not_full_of_doubts(utility, hourly_csv) -> None:
    """Where no connections were ever taken in, nothing can be said of them."""
    utility.take("units", "unit_id,rated_kva,feeder,customers\nA,25,F-1,3\nB,25,F-1,4\n")
    utility.take("loads", hourly_csv("A", 20.0 * EVENING))
    assert doubts(utility).empty


def test_meters_per_kva_far_from_the_feeders(utility) -> None:
    """A crowd on a small unit is odd; one large customer on a large unit is not."""
    sites = ORDINARY | {"CROWD": (10.0, [0.5] * 12), "MILL": (300.0, [210.0])}
    take(utility, sites)
    found = doubts(utility)
    assert found[found["doubt"] == COUNT]["unit_id"].tolist() == ["CROWD"]
    words = (
        "12 meters on 10 kVA, 12 customers in the register: 1.2 meters per kVA, where F-1 has 0.16"
    )
    assert words in found["evidence"].iloc[0]


def test_few_meters_and_little_load_are_a_doubt(utility) -> None:
    """A unit far too large for what hangs on it: its customers may be written down elsewhere."""
    take(utility, ORDINARY | {"LONE": (50.0, [4.0])})
    found = doubts(utility)
    assert found[found["doubt"] == COUNT]["unit_id"].tolist() == ["LONE"]


def test_small_feeders_are_silent(utility) -> None:
    """A median of five says nothing."""
    few = dict(list(ORDINARY.items())[:5]) | {"CROWD": (10.0, [0.5] * 12)}
    take(utility, few)
    assert COUNT not in doubts(utility)["doubt"].tolist()


# --- All together ---------------------------------------------------------------------------------


def test_a_feeder_alone_and_an_unknown_one(utility) -> None:
    """The part is a cut of the whole; a mistyped name is told."""
    sites = ORDINARY | {"CROWD": (10.0, [0.5] * 12)}
    take(utility, sites)
    assert doubts(utility, feeder="F-1")["unit_id"].tolist() == ["CROWD"]
    with pytest.raises(InputError, match="feeder 'F-9' is not in the store; there are: F-1"):
        doubts(utility, feeder="F-9")


def test_a_store_without_load_is_told_what_to_do(utility) -> None:
    """As an assessment is."""
    with pytest.raises(InputError, match="Import units, connections and loads first"):
        doubts(utility)


def test_the_same_hints_twice_and_as_a_file(utility) -> None:
    """The list can be compared with last month's."""
    sites = ORDINARY | {"U-A": (25.0, [4.0, 4.1, 4.2, 24.0]), "U-B": (37.5, [4.0])}
    take(utility, sites)
    assert csv_text(doubts(utility)) == csv_text(doubts(utility))


def test_a_band_is_not_moved_by_what_lies_outside() -> None:
    """Median and median absolute deviation: a tenth of wild figures does not widen it. For a normal
    sample the robust deviation is its standard deviation (computed: 1.4826 = 1/Phi^-1(3/4))."""
    rng = np.random.default_rng(3)
    logs = rng.normal(-0.5, 0.4, 4_000)
    band = Band.of(np.exp(logs).tolist(), 0.0)
    assert band.centre == pytest.approx(-0.5, abs=0.03)
    assert band.spread == pytest.approx(0.4, rel=0.05)
    wild = Band.of([*np.exp(logs).tolist(), *[1e6] * 400], 0.0)
    assert wild.spread == pytest.approx(band.spread, rel=0.2)


def test_the_two_planted_meters_of_the_demo_are_found_first(tmp_path) -> None:
    """The invented utility wrote two meters down at each other's site, and says so to nobody. Five
    weeks of 40 units are enough to find both, and nothing else stands before them."""
    files = write_larkmoor(tmp_path / "files", units=40, days=35)
    assert len(files.miswired_meters) == 2
    with TransformerStore(f"sqlite:///{tmp_path / 'tracker.db'}") as store:
        store.import_units(files.units)
        store.import_connections(files.connections)
        for path in files.loads:
            store.import_loads(path)
        found = store.doubtful_connections()
    assert set(found["meter_id"][:2]) == set(files.miswired_meters)
    assert (found["doubt"][:2] == MOVED).all()
    assert {*found["site_id"][:2]} == {*found["other_site_id"][:2]} == {"S-12-0047", "S-12-0084"}
    others = found[2:][~found["unit_id"][2:].isin(found["unit_id"][:2])]
    assert len(others) <= 1
