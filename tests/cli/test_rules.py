"""`tracker import marks` and `tracker store rules`: what validation finds, and how it is set."""

from __future__ import annotations

import csv
from pathlib import Path

import pytest


@pytest.fixture
def taken(tracker, tmp_path: Path) -> Path:
    """A meter that is stuck for two days and, once, read far beyond what its unit could carry."""
    kwh = [1 + hour % 5 / 10 for hour in range(96)]
    kwh[20:70] = [0.7] * 50
    kwh[80] = 900.0
    rows = "".join(
        f"M,2025-07-{1 + hour // 24:02d}T{hour % 24:02d}:00Z,{value}\n"
        for hour, value in enumerate(kwh)
    )
    for name, text in (
        ("units.csv", "unit_id,rated_kva,site_id\nT,25,S\n"),
        ("connections.csv", "meter_id,site_id\nM,S\n"),
        ("loads.csv", f"meter_id,read_at,kwh\n{rows}"),
    ):
        (tmp_path / name).write_text(text)
        assert tracker("import", name.removesuffix(".csv"), name).status == 0
    return tmp_path


def test_marks_are_listed(tracker, taken) -> None:
    """Meter, rule, from when to when; nothing is doubted in silence."""
    found = {mark["rule"]: mark for mark in tracker("import", "marks", "--json").data["marks"]}
    assert set(found) == {"stuck", "beyond"}
    assert found["stuck"]["starts_at"] == "2025-07-01T20:00:00Z"
    assert found["stuck"]["ends_at"] == "2025-07-03T22:00:00Z"
    assert found["beyond"]["set_aside"] is True
    assert "stuck" in tracker("import", "marks", "--rule", "stuck").out
    assert tracker("import", "marks", "--meter", "X", "--json").data == {"marks": []}
    assert tracker("import", "marks", "--rule", "odd").status == 2
    tracker("import", "marks", "marks.csv")
    with (taken / "marks.csv").open(newline="") as file:
        assert len(list(csv.DictReader(file))) == 2


def test_a_rule_that_is_changed_derives_the_loads_anew(tracker, taken) -> None:
    """Switched off, the impossible reading counts; set back, it is filled again."""

    def peak() -> float:
        tracker("trace", "T", "trace.csv")
        with (taken / "trace.csv").open(newline="") as file:
            return max(float(row["load_kva"] or 0) for row in csv.DictReader(file))

    assert peak() < 3
    assert (
        tracker("store", "rules", "--set", "beyond_rating=0", "--json").data["beyond_rating"] == 0
    )
    assert peak() > 900
    assert tracker("store", "check").status == 0
    shown = tracker("store", "rules", "--set", "beyond_rating=default")
    assert "beyond_rating" in shown.out
    assert peak() < 3


@pytest.mark.parametrize(
    "change", ["odd=1", "stuck_h=-1", "stuck_h=nan", "stuck_h", "stuck_h=x", "like_weeks=1.5"]
)
def test_a_rule_that_cannot_be_set_is_one_line(tracker, taken, change) -> None:
    """And nothing is changed."""
    answer = tracker("store", "rules", "--set", change)
    assert answer.status == 2
    assert answer.err.count("\n") == 1
    assert tracker("store", "rules", "--json").data["stuck_h"] == 24.0
