"""Whatever a file holds: every row has one fate, the store stays sound, and twice is once.

Small random files with random damage; each is taken into a store of its own.
"""

from __future__ import annotations

import itertools
import sqlite3
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

EXAMPLES = settings(
    max_examples=12,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)

METERS = st.sampled_from(["A", "B", " A ", "", "m" * 130])
HOURS = st.integers(0, 30).map(lambda hour: f"2025-06-{30 + hour // 24:02d}T{hour % 24:02d}:00Z")
STAMPS = st.one_of(
    *[st.integers(0, 40).map(lambda n: f"2025-07-01T{n % 24:02d}:{n // 24 * 30:02d}Z")] * 4,
    st.sampled_from(
        ["", "x", "2025-07-01", "2025-07-01T00:07Z", "2025-07-01T05:00", "3025-01-01T00Z"]
    ),
)
NUMBERS = st.floats(-50, 50).map(lambda value: f"{value:.3g}")
VALUES = st.one_of(*[NUMBERS] * 4, st.sampled_from(["", "  ", "nan", "inf", "1e400", "x", "1e30"]))
WORDS = st.sampled_from(["", "", "measured", "estimated", "missing", "E1"])
DATES = st.one_of(
    *[st.integers(1, 31).map(lambda day: f"2025-03-{day:02d}")] * 4,
    st.sampled_from(["", "x", "2025-02-30", "2025-11-02"]),
)

#: Whole lines that no parser takes, or that break what stands around them.
DAMAGE = st.sampled_from(
    [
        b"A",
        b"A,b,c,d,e,f,g,h,i",
        b'A,"2025-07-01T00:00Z"x,1,',
        b"A\xff,2025-07-01T00:00Z,1,",
        b"A\0,2025-07-01T00:00Z,1,",
        b'"A, B",2025-07-01T00:00Z,1,',
        b'"A ""quoted"" B",2025-07-01T00:00Z,1,',
    ]
)


def lines(*columns: st.SearchStrategy[str]) -> st.SearchStrategy[list[bytes]]:
    good = st.tuples(*columns).map(lambda cells: ",".join(cells).encode())
    return st.lists(st.one_of(*[good] * 9, DAMAGE), max_size=30)


def check(utility: Any, kind: str, content: bytes, n_reading: int | None, **options: Any) -> None:
    """Take a file twice, each time with all its rows accounted for and the store sound."""
    path = utility.file(content)
    first = utility.take(kind, path, **options)
    if n_reading is not None:
        assert first.readings == n_reading
    assert all(refusal.text and refusal.line > 1 for refusal in first.refusals)
    before = state(utility)
    again = utility.take(kind, path, **options)
    assert again.readings == first.readings
    assert again.refusals == first.refusals
    assert again.fates.taken == 0
    assert utility.problems() == []
    if first.fates.corrected == 0:
        assert again.fates.corrected == 0
    assert state(utility) == before


def state(utility: Any) -> list[Any]:
    """Return what is held, but for the ledger and what was superseded."""
    tables = ("unit", "site", "placement", "meter_connection", "reading_block", "site_load_block")
    with sqlite3.connect(utility.folder / "tracker.db") as connection:
        columns = {
            table: [row[1] for row in connection.execute(f"PRAGMA table_info({table})")]
            for table in tables
        }
        rows = [
            sorted(
                connection.execute(
                    f"SELECT {', '.join(name for name in names if name != 'id')} FROM {table}"
                ),
                key=repr,
            )
            for table, names in columns.items()
        ]
    connection.close()
    return rows


@pytest.fixture
def fresh(new_utility: Any, made_store: Any, tmp_path: Path) -> Callable[[], Any]:
    """Make utilities with two meters on a site, one for each example."""
    units, connections = "unit_id,rated_kva,site_id\nT,25,S\n", "meter_id,site_id\nA,S\nB,S\n"
    store = made_store(("units", units), ("connections", connections))
    return lambda: new_utility(Path(tempfile.mkdtemp(dir=tmp_path)), store)


@given(rows=lines(METERS, STAMPS, VALUES, WORDS), blank=st.integers(0, 2))
@EXAMPLES
def test_long_files(fresh, rows, blank) -> None:
    """Rows of the long layout: taken + unchanged + corrected + refused = rows."""
    content = b"\n" * blank + b"\n".join([b"meter_id,read_at,kwh,quality", *rows, b""])
    check(fresh(), "loads", content, len(rows), timezone="America/Chicago", interval=30)


@given(
    rows=st.lists(st.tuples(METERS, DATES, st.lists(VALUES, min_size=25, max_size=25)), max_size=6),
    zone=st.sampled_from(["UTC", "America/Chicago", "Asia/Kolkata"]),
)
@EXAMPLES
def test_files_of_days(fresh, rows, zone) -> None:
    """Cells that are not blank: each has a fate of its own."""
    heading = ["meter_id", "date", *(f"h{hour:02d}" for hour in range(1, 26))]
    text = "\n".join([",".join(heading), *(",".join([m, d, *cells]) for m, d, cells in rows), ""])
    n_cell = sum(bool(cell.strip()) for _, _, cells in rows for cell in cells)
    check(fresh(), "loads", text.encode(), n_cell, timezone=zone)


@given(rows=lines(st.just("A"), HOURS, VALUES, WORDS))
@EXAMPLES
def test_weather_files(fresh, rows) -> None:
    """Temperatures go the same way as loads."""
    content = b"\n".join([b"station_id,read_at,air_temp_c,quality", *rows, b""])
    check(fresh(), "weather", content, len(rows), interval=60, timezone="UTC")


@given(
    rows=lines(
        st.sampled_from(["U-1", "U-2", "U-3", ""]),
        st.sampled_from(["25", "50", "0", "x"]),
        st.sampled_from(["S-1", "S-2", ""]),
        st.sampled_from(["", "2020-01-01", "2021-06-01", "x"]),
    )
)
@EXAMPLES
def test_registers_of_units(fresh, rows) -> None:
    """Whatever order and contradictions a register brings, what is accepted is accepted again."""
    content = b"\n".join([b"unit_id,rated_kva,site_id,installed_on", *rows, b""])
    check(fresh(), "units", content, len(rows))


@given(
    rows=lines(
        st.sampled_from(["A", "B", "C", ""]),
        st.sampled_from(["S", "NOWHERE", ""]),
        st.sampled_from(["", "2025-06-30", "2025-07-02"]),
        st.sampled_from(["1", "2.5", "0"]),
    )
)
@EXAMPLES
def test_files_of_connections(fresh, rows) -> None:
    """Connections over readings that are held: the sites' loads stay those of their readings."""
    utility = fresh()
    stamps = [f"2025-07-0{day}T{hour:02d}:00Z" for day in (1, 2, 3) for hour in range(24)]
    readings = "".join(f"{meter},{stamp},1\n" for meter, stamp in itertools.product("ABC", stamps))
    utility.take("loads", "meter_id,read_at,kw\n" + readings)
    content = b"\n".join([b"meter_id,site_id,starts_on,multiplier", *rows, b""])
    check(utility, "connections", content, len(rows))
