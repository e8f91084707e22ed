"""Interval readings with one column a meter."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from tracker.errors import InputError, IntakeError
from tracker.intake import wide
from tracker.store.models import ReadingBlock

CHICAGO = "America/Chicago"


@pytest.fixture
def site(new_utility, made_store, tmp_path):
    """One site with two meters, a1 and A1; a unit, T, that may be measured as a whole."""
    units = "unit_id,rated_kva,site_id\nT,25,S\n"
    connections = "meter_id,site_id\na1,S\nA1,S\n"
    return new_utility(tmp_path, made_store(("units", units), ("connections", connections)))


def hours(n: int) -> list[str]:
    return [f"2025-07-01T{hour:02d}:00Z" for hour in range(n)]


def test_a_column_each(site, fates) -> None:
    """Ids are told apart by case, as meters may be; blank cells are no readings."""
    text = "Read At,a1,A1\n" + "".join(
        f"{stamp},{i},{'' if i == 2 else 10 * i}\n" for i, stamp in enumerate(hours(4))
    )
    report = site.take("loads", text, power_factor=1)
    assert fates(report) == (7, 0, 0, 0)
    assert report.left_out == []
    assert site.readings("a1").tolist() == [0, 1, 2, 3]
    assert site.readings("A1").tolist() == [0, 10, 30]
    assert fates(site.take("loads", text, power_factor=1)) == (0, 7, 0, 0)
    assert site.problems() == []


@pytest.mark.parametrize(("quantity", "kva"), [("kwh", 4.0), ("kw", 1.0), ("kva", 1.0)])
def test_quantity_says_what_the_cells_are(site, quantity, kva) -> None:
    """No heading names it."""
    stamps = [f"2025-07-01T00:{minute:02d}Z" for minute in (0, 15, 30, 45)]
    text = "read_at,a1\n" + "".join(f"{stamp},1\n" for stamp in stamps)
    site.take("connections", "meter_id,site_id,ends_on\nA1,S,2020-01-01\n")
    site.take("loads", text, quantity=quantity, power_factor=1)
    np.testing.assert_allclose(site.site_load("S"), kva)


def test_a_column_a_unit(site, fates) -> None:
    """Load already summed at the transformer comes in the same layout."""
    text = "read_at,T\n" + "".join(f"{stamp},9\n" for stamp in hours(3))
    assert fates(site.take("loads", text, series="unit", quantity="kva")) == (3, 0, 0, 0)
    assert site.site_load("S").tolist() == [9, 9, 9]
    with pytest.raises(InputError, match="series = 'site' is not known; allowed: meter, unit"):
        site.take("loads", text, series="site")


def test_the_repeated_hour_in_every_column(site, fates) -> None:
    """Told apart by order, column by column."""
    utc = pd.date_range("2025-11-02T05:00", periods=4, freq="h", tz="UTC")
    text = "read_at,a1,A1\n" + "".join(
        f"{moment.tz_convert(CHICAGO):%Y-%m-%d %H:%M},{i},{i + 10}\n"
        for i, moment in enumerate(utc)
    )
    assert fates(site.take("loads", text, timezone=CHICAGO)) == (8, 0, 0, 0)
    for name, first in (("a1", 0), ("A1", 10)):
        held = site.readings(name)
        assert list(held.index) == list(utc)
        assert held.tolist() == [first + i for i in range(4)]


def test_refusals_name_row_and_column(site, fates) -> None:
    """Every cell that is not blank has one fate; a bad stamp loses its row's cells."""
    text = "read_at,a1,A1\n2025-07-01T00:00Z,1,x\nnever,1,\n2025-07-01T01:00Z,2,3\n"
    report = site.take("loads", text)
    assert fates(report) == (3, 0, 0, 2)
    assert [(each.line, each.column, each.code) for each in report.refusals] == [
        (2, "A1", "value.not_a_number"),
        (3, "a1", "stamp.unreadable"),
    ]


def test_more_columns_than_are_read_side_by_side(site, fates, monkeypatch) -> None:
    """A wide file is read several times; it must come to the same."""
    names = [f"W{i:04d}" for i in range(50)]
    lines = [",".join(["read_at", *names])]
    lines += [
        ",".join([stamp, *(str(i + j) for j in range(50))]) for i, stamp in enumerate(hours(5))
    ]
    monkeypatch.setattr(wide, "COLUMNS_A_PASS", 7)
    monkeypatch.setattr(wide, "CELLS_A_BATCH", 20)
    report = site.take("loads", "\n".join([*lines, "broken"]) + "\n")
    assert fates(report) == (250, 0, 0, 1)
    assert report.refusals[0].line == 7
    assert site.readings("W0049").tolist() == [49, 50, 51, 52, 53]


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("read_at,a1,a1\n2025-07-01T00:00Z,1,2\n", "heading 'a1' stands 2 times"),
        ("read_at,a1,\n2025-07-01T00:00Z,1,2\n", "heading '' is no id"),
        ("meter,read_at,usage\nM,2025-07-01T00:00Z,1\n", "column 'meter' holds text such as 'M'"),
        ("read_at,kwh\n2025-07-01T00:00Z,1\n", "are of no layout"),
        ("read_at\n2025-07-01T00:00Z\n", "are of no layout"),
    ],
)
def test_a_file_that_is_none_is_refused_whole(site, text, says) -> None:
    """A mistaken heading must not become a meter."""
    with pytest.raises(IntakeError, match=says):
        site.take("loads", text)
    assert site.count(ReadingBlock) == 0
