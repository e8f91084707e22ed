"""The load of a site, from what hangs on it: by hand, and against pandas."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest

from tracker.store import readings as held_readings

UNITS = "unit_id,rated_kva,site_id\nT,25,S\n"
HOURS = [f"2025-07-01T{hour:02d}:00Z" for hour in range(10)]
SCALED = 4


@pytest.fixture
def site(new_utility, made_store, tmp_path):
    """A site with three meters."""
    connections = "meter_id,site_id\nA,S\nB,S\nC,S\n"
    return new_utility(tmp_path, made_store(("units", UNITS), ("connections", connections)))


def kw_file(**meters: list[object]) -> str:
    """Long file of hourly kW; None has no row."""
    rows = [
        f"{meter},{stamp},{kw}"
        for meter, values in meters.items()
        for stamp, kw in zip(HOURS, values, strict=False)
        if kw is not None
    ]
    return "meter_id,read_at,kw\n" + "\n".join(rows) + "\n"


def test_export_counts_against_use(site) -> None:
    """Contract: negative kWh is export, and the load is the magnitude of the net. By hand, power
    factor 1: 5 − 8 + 1 = −2 → 2 kVA; 5 − 1 + 1 = 5; 1 − 1 + 0 = 0."""
    site.take("loads", kw_file(A=[5, 5, 1], B=[-8, -1, -1], C=[1, 1, 0]), power_factor=1)
    np.testing.assert_allclose(site.site_load("S"), [2.0, 5.0, 0.0], atol=1e-6)


def test_net_export_with_the_assumed_power_factor(site) -> None:
    """The same power factor for all scales the net: |−1.9| / 0.95 = 2 kVA."""
    site.take("loads", kw_file(A=[1.0], B=[-3.9], C=[1.0]), interval=60)
    np.testing.assert_allclose(site.site_load("S"), [2.0], rtol=1e-6)


def test_power_factors_add_as_vectors(site) -> None:
    """By hand: 8 kW at 0.8 (6 kvar) and 12 kW at 0.6 (16 kvar) are 20 kW, 22 kvar: 29.73 kVA."""
    site.take("connections", "meter_id,site_id,ends_on\nC,S,2025-01-01\n")
    site.take("loads", kw_file(A=[8.0, 8.0]), power_factor=0.8)
    site.take("loads", kw_file(B=[12.0, 12.0]), power_factor=0.6)
    np.testing.assert_allclose(site.site_load("S"), [math.hypot(20, 22)] * 2, rtol=1e-6)


def test_multipliers_count_in_the_net(site) -> None:
    """A meter behind 40:1 current transformers carries forty times what it shows."""
    site.take("connections", "meter_id,site_id,multiplier\nA,S,40\nB,S,1\nC,S,0.5\n")
    site.take("loads", kw_file(A=[1.0, 1.0], B=[-10.0, 2.0], C=[4.0, 4.0]), power_factor=1)
    np.testing.assert_allclose(site.site_load("S"), [32.0, 44.0], rtol=1e-6)


def test_what_is_measured_at_the_transformer_stands_before_the_sum(site) -> None:
    """A meter on the transformer sees losses, lights and theft; where it has gaps the sum helps."""
    site.take("loads", kw_file(A=[1, 1, 1], B=[1, 1, 1], C=[1, 1, 1]), power_factor=1)
    text = "unit_id,read_at,kva\n" + f"T,{HOURS[0]},7\nT,{HOURS[2]},9\n"
    site.take("loads", text, interval=60)
    assert list(site.site_load("S")) == [7.0, 3.0, 9.0]


def test_missing_meters_are_scaled_when_most_is_measured(ground) -> None:
    """A and B carry 90 % of the site's energy: without C the sum is raised by 10/9. Where A is
    missing only half is measured, and half is not enough to tell the rest. By hand; gaps are left as
    they are."""
    ground.rules(line_gap_h=0, like_weeks=0)
    a, b, c = (np.full(10, kw) for kw in (5.0, 4.0, 1.0))
    c[3] = np.nan  # 90 % is measured
    a[5] = np.nan  # 50 %
    b[7] = np.nan  # 60 %: just enough
    a[8] = b[8] = c[8] = np.nan
    for name, kw in (("A", a), ("B", b), ("C", c)):
        ground.meter(name)
        ground.read(name, kw)
    load, flags, measured = ground.load(), ground.flags(), ground.measured()
    assert [moment.hour for moment in load.index] == [0, 1, 2, 3, 4, 6, 7, 9]
    np.testing.assert_allclose(load, 10.0, rtol=1e-6)
    assert [moment.hour for moment in flags.index[(flags & SCALED) != 0]] == [3, 7]
    np.testing.assert_allclose(measured, [1, 1, 1, 0.9, 1, 1, 0.6, 1])
    ground.rules(least_measured_pct=61.0)
    assert [moment.hour for moment in ground.load().index] == [0, 1, 2, 3, 4, 6, 9]
    ground.rules(least_measured_pct=50.0)
    assert [moment.hour for moment in ground.load().index] == [0, 1, 2, 3, 4, 5, 6, 7, 9]
    assert ground.problems() == []


def test_what_was_filled_does_not_help_to_scale(ground) -> None:
    """Six tenths must be measured: a filled half and a read third are a third, and the meter that is
    missing then leaves the site missing."""
    for name, kw in (("A", 5.0), ("B", 3.0), ("C", 2.0)):
        ground.meter(name)
        values = np.full(48, kw)
        if name == "A":
            values[20] = np.nan  # filled by a line
        if name == "C":
            values[10:40] = np.nan  # no like day is held
        ground.read(name, values)
    missing = [
        hour
        for hour in range(48)
        if hour not in {m.hour + 24 * (m.day - 1) for m in ground.load().index}
    ]
    assert missing == [20]
    np.testing.assert_allclose(ground.load(), 10.0, rtol=1e-6)


def test_a_meter_that_was_never_read_has_the_mean_weight_of_the_others(site) -> None:
    """Two of three meters are two thirds: enough; the sum is raised by half."""
    site.take("loads", kw_file(A=[4.0, 4.0], B=[4.0, 4.0]), power_factor=1)
    np.testing.assert_allclose(site.site_load("S"), [12.0, 12.0], rtol=1e-6)
    assert list(site.site_flags("S") & SCALED) == [SCALED, SCALED]


def test_one_of_three_meters_is_not_enough(site) -> None:
    """A third of the meters says too little: the site is left missing, and no zero."""
    site.take("loads", kw_file(A=[4.0, 4.0]), power_factor=1)
    assert len(site.site_load("S")) == 0


def test_a_disconnected_meter_is_not_missed(site) -> None:
    """A house torn down must not have its site scaled for ever."""
    site.take("connections", "meter_id,site_id,ends_on\nA,S,\nB,S,2025-07-01\nC,S,2025-07-01\n")
    site.take("loads", kw_file(A=[4.0, 4.0], B=[9.0, 9.0]), power_factor=1)
    np.testing.assert_allclose(site.site_load("S"), [4.0, 4.0], rtol=1e-6)
    assert list(site.site_flags("S") & SCALED) == [0, 0]


def test_a_site_without_load_is_zero_not_missing(site) -> None:
    """An empty holiday home is 0 kVA, and cools."""
    site.take("loads", kw_file(A=[0, 0], B=[0, 0], C=[0, 0]))
    assert list(site.site_load("S")) == [0.0, 0.0]


def test_a_corrected_reading_derives_the_load_anew(site, fates) -> None:
    """The site's load must follow its readings at once."""
    site.take("loads", kw_file(A=[1, 1], B=[1, 1], C=[1, 1]), power_factor=1)
    assert fates(site.take("loads", kw_file(B=[6, 1]), power_factor=1)) == (0, 1, 1, 0)
    assert list(site.site_load("S")) == [8.0, 3.0]
    assert site.problems() == []


# --- Quantities ---------------------------------------------------------------------------------


def test_reactive_readings_make_a_vector_sum(ground) -> None:
    """By hand: A has 8 kW and 6 kvar, B 4 kW at its power factor of 0.8, so 3 kvar: 12 kW and 9 kvar are
    15 kVA. Where A's reactive reading is missing its own power factor of 1 stands in: 12 and 3."""
    ground.meter("A", power_factor=1.0)
    ground.meter("B", power_factor=0.8)
    ground.read("A", [8.0] * 5)
    ground.read("A", [6.0, 6.0, -6.0, np.nan, 6.0], quantity="kvar")
    ground.read("B", [4.0] * 5)
    wanted = [15.0, 15.0, math.hypot(12, 3), math.hypot(12, 3), 15.0]
    np.testing.assert_allclose(ground.load(), wanted, rtol=1e-6)


def test_the_power_factor_of_the_meter_stands_before_that_of_its_readings(ground) -> None:
    """By hand: 4 kW at 0.8 are 5 kVA, at 0.5 they are 8, at the assumed 0.95 they are 4.21."""
    keys = {}
    for name, power_factor in (("A", None), ("B", None), ("C", 0.5)):
        site = ground.site(f"S-{name}")
        keys[name] = site
        ground.meter(name, f"S-{name}", power_factor=power_factor)
    with ground.database.writing() as connection:
        series = held_readings.series_keys(connection, "meter", ["B", "C"])
        held_readings.set_power_factor(connection, list(series.values()), 0.8)
    for name, kva in (("A", 4 / 0.95), ("B", 5.0), ("C", 8.0)):
        ground.read(name, [4.0])
        np.testing.assert_allclose(ground.load(f"S-{name}"), [kva], rtol=1e-6)


@pytest.mark.parametrize(
    ("phases", "quantity", "amps", "kva"),
    [
        (1, "amps_lv", 100.0, 24.0),
        (1, "amps_hv", 100.0 / 30.0, 24.0),
        (3, "amps_lv", 100.0, 24.0 * math.sqrt(3)),
        (3, "amps_hv", 100.0 / 30.0, 24.0 * math.sqrt(3)),
        (None, "amps_lv", 100.0, 24.0),
    ],
)
def test_amperes_by_hand(new_ground, phases, quantity, amps, kva) -> None:
    """100 A at 240 V are 24 kVA with one phase, times the root of three with three (line to line), and
    the same in amperes of the 7,200 V side: the ideal ratio is 30 (common practice)."""
    ground = new_ground()
    ground.unit(250.0, phases=phases, hv_volts=7200.0, lv_volts=240.0)
    ground.meter("M", multiplier=2.0)
    ground.read("M", [amps, amps], quantity=quantity)
    ground.read("T-S", [amps], "2025-07-02", quantity=quantity, kind="unit")
    load = ground.load()
    np.testing.assert_allclose(load.iloc[:2], 2 * kva, rtol=1e-6)
    np.testing.assert_allclose(load.iloc[-1], kva, rtol=1e-6)
    assert ground.problems() == []


def test_amperes_without_a_voltage_are_as_if_not_read(new_ground) -> None:
    """The register does not say the voltage: what is there in kW is used, and nothing else."""
    ground = new_ground()
    ground.unit(250.0, lv_volts=240.0)
    ground.meter("M")
    ground.read("M", [10.0, 10.0], quantity="amps_hv")
    ground.read("M", [np.nan, 5.0])
    assert ground.load().tolist() == [5.0]
    assert f"{ground.load().index[0]:%H}" == "01"


def test_amperes_count_with_the_unit_that_stands_there_at_the_time(new_ground) -> None:
    """A 120 V unit is exchanged for one of 240 V at three o'clock."""
    ground = new_ground()
    ground.unit(50.0, name="T-1", ends="2025-07-01T03:00", lv_volts=120.0)
    ground.unit(50.0, name="T-2", starts="2025-07-01T03:00", lv_volts=240.0)
    ground.meter("M")
    ground.read("M", [100.0] * 6, quantity="amps_lv")
    np.testing.assert_allclose(ground.load(), [12, 12, 12, 24, 24, 24], rtol=1e-6)


def test_of_several_quantities_the_one_that_says_most_is_used(new_ground) -> None:
    """kva, then the low-voltage side's amperes, then the high-voltage side's, then kw; interval by
    interval."""
    ground = new_ground()
    ground.unit(50.0, hv_volts=1000.0, lv_volts=100.0)
    ground.meter("M")
    gap = np.nan
    ground.read("M", [4.0, 4.0, 4.0, 4.0])
    ground.read("M", [gap, 30.0, 30.0, 30.0], quantity="amps_hv")
    ground.read("M", [gap, gap, 200.0, 200.0], quantity="amps_lv")
    ground.read("M", [gap, gap, gap, 10.0], quantity="kva")
    np.testing.assert_allclose(ground.load(), [4.0, 30.0, 20.0, 10.0], rtol=1e-6)


def test_apparent_power_has_no_angle_and_is_added(ground) -> None:
    """By hand: 3 kW and 4 kvar of one meter, and 2 kVA of another: 7 kVA."""
    ground.meter("A")
    ground.meter("B")
    ground.read("A", [3.0])
    ground.read("A", [4.0], quantity="kvar")
    ground.read("B", [2.0], quantity="kva")
    np.testing.assert_allclose(ground.load(), [7.0], rtol=1e-6)


def test_meters_of_different_steps_keep_their_energy(ground) -> None:
    """An hourly meter beside one of quarter hours fills all four."""
    ground.meter("A")
    ground.meter("B")
    ground.read("A", [8.0])
    ground.read("B", [1.0, 2.0, 3.0, 4.0], step_min=15)
    assert ground.load().tolist() == [9.0, 10.0, 11.0, 12.0]


def test_many_sites_in_small_batches_give_the_same(new_ground, monkeypatch) -> None:
    """Batches and threads are for speed and say nothing of the result."""
    dumps = []
    for n_byte in (20_000_000, 1):
        monkeypatch.setattr("tracker.intake.site_load.BYTES_A_BATCH", n_byte)
        monkeypatch.setattr("tracker.intake.site_load.FIRST_SITES", 3)
        ground = new_ground()
        rng = np.random.default_rng(1)
        for site in "ABCDEFGH":
            ground.unit(25.0, site)
            ground.meter(f"M-{site}", site)
            kw = rng.uniform(1.0, 2.0, 60 * 24)
            kw[100:110] = np.nan
            ground.read(f"M-{site}", kw, "2025-06-10")
        ground.rules(stuck_h=25)
        dumps.append(ground.dump())
        assert ground.problems() == []
    assert dumps[0] == dumps[1]
    assert len(dumps[0]) == 8 * 3


# --- Against an independent computation -----------------------------------------------------------


def a_small_utility(rng: np.random.Generator) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return connections with dates and multipliers, and hourly or quarter-hourly kWh, with export."""
    sites = [f"S-{number}" for number in range(4)]
    connections, loads = [], []
    for number in range(14):
        meter = f"M-{number:02d}"
        days = sorted(rng.choice(np.arange(2, 60), size=2, replace=False))
        dates = [str(np.datetime64("2025-05-30") + int(day)) for day in days]
        places = rng.permutation(sites)
        multiplier = float(rng.choice([1, 1, 20, 0.5]))
        connections += [
            (meter, places[0], None, dates[0], multiplier),
            (meter, places[1], dates[0], dates[1], multiplier),
            (meter, places[0], dates[1], None, multiplier),
        ]
        step = "15min" if number % 3 == 0 else "h"
        stamps = pd.date_range("2025-05-28", "2025-08-02", freq=step, tz="UTC", inclusive="left")
        kwh = rng.normal(1.0, 1.5, len(stamps)).round(3)
        loads.append(pd.DataFrame({"meter_id": meter, "read_at": stamps, "kwh": kwh}))
    columns = ["meter_id", "site_id", "starts_on", "ends_on", "multiplier"]
    return pd.DataFrame(connections, columns=columns), pd.concat(loads, ignore_index=True)


def kva_by_pandas(connections: pd.DataFrame, loads: pd.DataFrame, zone: str) -> pd.DataFrame:
    """Sum the rows of the files in another way: quarter hours, join, add; power factor 0.95."""
    step_h = loads.groupby("meter_id")["read_at"].transform(
        lambda stamps: stamps.diff().min().total_seconds() / 3600
    )
    rows = loads.assign(kw=loads["kwh"] / step_h)
    quarters = rows.loc[rows.index.repeat((4 * step_h).astype(int))]
    quarters["read_at"] += pd.Timedelta(minutes=15) * quarters.groupby(level=0).cumcount()
    joined = quarters.merge(connections, on="meter_id")
    for name, fallback in (("starts_on", "1990-01-01"), ("ends_on", "2190-01-01")):
        joined[name] = pd.to_datetime(joined[name].fillna(fallback)).dt.tz_localize(zone)
    joined = joined[
        (joined["read_at"] >= joined["starts_on"]) & (joined["read_at"] < joined["ends_on"])
    ]
    net_kw = (joined["kw"] * joined["multiplier"]).groupby([joined["site_id"], joined["read_at"]])
    return net_kw.sum().abs().div(0.95).unstack("site_id")


@pytest.mark.parametrize("seed", [1, 2])
def test_site_loads_against_pandas(utility, seed) -> None:
    """An independent computation from the rows of the files: dates of exchange at local midnight,
    multipliers, export, hours beside quarter hours, three months."""
    zone = "America/Chicago"
    connections, loads = a_small_utility(np.random.default_rng(seed))
    utility.take(
        "units",
        "unit_id,rated_kva,site_id\n" + "".join(f"T-{n},500,S-{n}\n" for n in range(4)),
    )
    utility.take("connections", connections, timezone=zone)
    path = utility.folder / "loads.csv"
    loads.sample(frac=1, random_state=seed).assign(
        read_at=lambda rows: rows["read_at"].dt.strftime("%Y-%m-%dT%H:%M:%SZ")
    ).to_csv(path, index=False)
    report = utility.take("loads", path)
    assert report.fates.taken == len(loads)
    wanted = kva_by_pandas(connections, loads, zone)
    for site_id in wanted:
        held = utility.site_load(site_id)
        own = wanted[site_id].dropna()
        # A month of hourly meters only is held by the hour; all else by the quarter.
        held = held.reindex(own.index, method="ffill", tolerance=pd.Timedelta(minutes=45))
        np.testing.assert_allclose(held, own, rtol=2e-5, atol=2e-5)
    assert utility.problems() == []
