"""The small set of files that comes with the project, through the commands that the README gives."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

DEMO_DATA = Path(__file__).resolve().parents[2] / "demo_data"

#: What scripts outside rely on, in this order.
TRACE_COLUMNS = [
    "interval_start",
    "load_kva",
    "air_temp_c",
    "top_oil_c",
    "hot_spot_c",
    "aging_factor",
]
PRIORITY_COLUMNS = [
    "rank",
    "unit_id",
    "site_id",
    "feeder",
    "rated_kva",
    "peak_load_pct",
    "peak_hot_spot_c",
    "peak_hot_spot_at",
    "peak_top_oil_c",
    "hours_over_rating",
    "hours_over_hot_spot_limit",
    "aging_factor",
    "life_used_pct",
    "coverage_pct",
    "suggested_kva",
    "reasons",
]

LIMIT_C = 140.0
LIFE_H = 180_000.0

#: The hottest unit, and two of which one took the other's place in the middle of the period.
TRACED = ("LK-11-0047", "LK-22-0047", "LK-22-0247")


@dataclass(frozen=True)
class Demo:
    """What the commands gave."""

    imports: dict[str, dict[str, Any]]
    ranking: list[dict[str, Any]]
    priority: pd.DataFrame
    traces: dict[str, pd.DataFrame]  #: by unit id


@pytest.fixture(scope="module")
def demo(tracker_in: Callable[..., str], tmp_path_factory: pytest.TempPathFactory) -> Demo:
    """The commands of the README, in its order."""
    folder = tmp_path_factory.mktemp("demo_data")
    imports = {
        kind: json.loads(tracker_in(folder, "import", kind, DEMO_DATA / name, "--json"))
        for kind, name in (
            ("units", "units.csv"),
            ("connections", "connections.csv"),
            ("loads", "loads.csv.gz"),
            ("weather", "weather.csv"),
        )
    }
    tracker_in(folder, "assess")
    ranking = json.loads(tracker_in(folder, "rank", "--json"))
    for unit_id in TRACED:
        tracker_in(folder, "trace", unit_id, f"{unit_id}.csv")
    tracker_in(folder, "export", "priority_list.csv")
    return Demo(
        imports,
        ranking,
        pd.read_csv(folder / "priority_list.csv", parse_dates=["peak_hot_spot_at"]),
        {
            unit_id: pd.read_csv(folder / f"{unit_id}.csv", parse_dates=["interval_start"])
            for unit_id in TRACED
        },
    )


def test_every_row_is_taken(demo: Demo) -> None:
    """The files are clean, and the four fates add up to the rows."""
    for report in demo.imports.values():
        assert report["readings"] == report["taken"] > 0
        assert report["unchanged"] == report["corrected"] == report["refused"] == 0
        assert report["refusals"] == []


def test_columns(demo: Demo) -> None:
    """Names and order are what scripts outside rely on; others may follow in the list."""
    assert list(demo.priority.columns)[: len(PRIORITY_COLUMNS)] == PRIORITY_COLUMNS
    for trace in demo.traces.values():
        assert list(trace.columns) == TRACE_COLUMNS


def test_ranking_is_the_list_by_heat(demo: Demo) -> None:
    """The same units and figures, hottest first."""
    heat_c = [row["peak_hot_spot_c"] for row in demo.ranking]
    assert heat_c == sorted(heat_c, reverse=True)
    in_list = demo.priority.set_index("unit_id").loc[[row["unit_id"] for row in demo.ranking]]
    assert len(in_list) == len(demo.priority)
    for name in ("peak_load_pct", "peak_hot_spot_c", "aging_factor", "life_used_pct"):
        figures = [row[name] for row in demo.ranking]
        np.testing.assert_allclose(figures, in_list[name], rtol=1e-6)


@pytest.mark.parametrize("unit_id", TRACED)
def test_trace_adds_up_to_the_row_of_the_list(unit_id: str, demo: Demo) -> None:
    """Peaks, hours, aging and life used, counted again from the trace after its first 24 h.

    The list comes from the compiled kernel in float32, the trace from the readable form: 0.001 °C
    and 0.01 % of aging are what the two are held to.
    """
    row = demo.priority.set_index("unit_id").loc[unit_id]
    known = demo.traces[unit_id].dropna().set_index("interval_start")
    assert (known.index.to_series().diff().dropna() == pd.Timedelta(hours=1)).all()
    counted = known.iloc[24:]

    load_pu = counted["load_kva"] / row["rated_kva"]
    assert row["peak_load_pct"] == pytest.approx(100 * load_pu.max(), rel=1e-6)
    assert row["hours_over_rating"] == (load_pu > 1).sum()
    assert row["peak_hot_spot_c"] == pytest.approx(counted["hot_spot_c"].max(), abs=1e-3)
    assert row["peak_top_oil_c"] == pytest.approx(counted["top_oil_c"].max(), abs=1e-3)
    assert row["peak_hot_spot_at"] == counted["hot_spot_c"].idxmax()
    assert row["hours_over_hot_spot_limit"] == (counted["hot_spot_c"] > LIMIT_C).sum()
    assert row["aging_factor"] == pytest.approx(counted["aging_factor"].mean(), rel=1e-4)
    life_used_pct = 100 * counted["aging_factor"].sum() / LIFE_H
    assert row["life_used_pct"] == pytest.approx(life_used_pct, rel=1e-4)
    assert row["coverage_pct"] == 100.0


def test_load_of_an_exchanged_place_goes_to_whoever_stood_there(demo: Demo) -> None:
    """The old unit's trace ends where the new one's begins, and no hour is in both."""
    old, new = (
        demo.traces[unit_id].dropna()["interval_start"] for unit_id in ("LK-22-0047", "LK-22-0247")
    )
    assert new.iloc[0] - old.iloc[-1] == pd.Timedelta(hours=1)
