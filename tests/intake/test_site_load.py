"""The load of a site, from what hangs on it: by hand, and against pandas."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
import pytest

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


def test_missing_meters_are_scaled_when_most_is_measured(site) -> None:
    """A and B carry 90 % of the site's energy: without C the sum is raised by 10/9. Where A is
    missing only half is measured, and half is not enough to tell the rest."""
    a, b, c = [5.0] * 10, [4.0] * 10, [1.0] * 10
    c[3] = None  # 90 % is measured
    a[5] = None  # 50 %
    b[7] = None  # 60 %: just enough
    a[8] = b[8] = c[8] = None
    site.take("loads", kw_file(A=a, B=b, C=c), power_factor=1)
    load, flags = site.site_load("S"), site.site_flags("S")
    assert [moment.hour for moment in load.index] == [0, 1, 2, 3, 4, 6, 7, 9]
    np.testing.assert_allclose(load, 10.0, rtol=1e-6)
    assert [moment.hour for moment in flags.index[(flags & SCALED) != 0]] == [3, 7]


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
        "unit_id,rated_kva,site_id\n" + "".join(f"T-{n},25,S-{n}\n" for n in range(4)),
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
