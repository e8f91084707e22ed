"""Damaged files of every layout: no traceback, every row one fate, a sound store after each.

A mutator takes valid files and cuts, doubles, swaps and corrupts their bytes. Two thousand files run
with the other tests, twenty thousand more on demand (`pytest -m slow tests/intake/test_fuzz.py`).
Each file is made from a number; `damaged(number)` makes the one a failure names again.
"""

from __future__ import annotations

import gzip
import io
import random
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from sqlalchemy import func, select

from tracker.errors import TrackerError
from tracker.intake.files import files_named, intake_options, take_files
from tracker.intake.guide import read_guide
from tracker.intake.guide_draft import draft_guide
from tracker.store.models import IntakeFile, IntakeRefusal

#: Files a test takes in one after the other, into one store.
FILES_A_TEST = 50

UNITS = "unit_id,rated_kva,site_id,feeder,latitude,longitude\nT,25,S,F,44.1,-93.2\nT2,50,S2,F,44.1,-93.3\n"
CONNECTIONS = (
    "meter_id,site_id,starts_on,multiplier,power_factor,class\n"
    "A,S,,1,,home\nB,S,2025-07-02,2,0.9,\n"
)
STAMPS = [f"2025-07-{day:02d}T{hour:02d}:00" for day in (1, 2, 3) for hour in range(24)]


# --- Valid files ----------------------------------------------------------------------------------


def _long(separator: str = ",", end: str = "\n", zone: str = "Z") -> str:
    rows = [("meter_id", "read_at", "kwh", "kvarh", "quality")]
    rows += [
        (
            meter,
            stamp + zone,
            f"{i % 7 / 3:.3f}",
            f"{i % 3}",
            ("", "estimated", "missing")[i % 29 % 3],
        )
        for meter in "AB"
        for i, stamp in enumerate(STAMPS)
    ]
    return end.join(separator.join(row) for row in rows) + end


def _days() -> str:
    head = ["meter_id", "date", *(f"h{hour:02d}" for hour in range(1, 26))]
    rows = [[m, f"2025-07-0{d}", *map(str, range(24)), ""] for m in "AB" for d in (1, 2, 3)]
    return "\n".join(",".join(row) for row in [head, *rows]) + "\n"


def _wide() -> str:
    rows = [["read_at", "A", "B"], *([stamp + "Z", "1.5", "2"] for stamp in STAMPS)]
    return "\n".join(",".join(row) for row in rows) + "\n"


def _parquet() -> bytes:
    out = io.BytesIO()
    stamps = pd.to_datetime(STAMPS, utc=True)
    pq.write_table(
        pa.table({"meter_id": ["A"] * len(STAMPS), "read_at": stamps, "kw": [1.5] * len(STAMPS)}),
        out,
    )
    return out.getvalue()


def _zst(text: str) -> bytes:
    sink = pa.BufferOutputStream()
    with pa.CompressedOutputStream(sink, "zstd") as stream:
        stream.write(text.encode())
    return sink.getvalue().to_pybytes()


def _green_button() -> str:
    readings = "".join(
        f"<IntervalReading><timePeriod><duration>3600</duration><start>{1751328000 + 3600 * i}</start>"
        f"</timePeriod><value>{100 * i}</value></IntervalReading>"
        for i in range(48)
    )
    base = "https://utility.invalid/UsagePoint/A"
    return f"""<?xml version="1.0" encoding="UTF-8"?>
<feed xmlns="http://www.w3.org/2005/Atom">
<entry><link rel="self" href="{base}"/><content><UsagePoint xmlns="http://naesb.org/espi"/></content></entry>
<entry><link rel="self" href="{base}/MeterReading/1"/><link rel="up" href="{base}/MeterReading"/>
<link rel="related" href="https://utility.invalid/ReadingType/1"/>
<content><MeterReading xmlns="http://naesb.org/espi"/></content></entry>
<entry><link rel="self" href="https://utility.invalid/ReadingType/1"/><content>
<ReadingType xmlns="http://naesb.org/espi"><flowDirection>1</flowDirection>
<intervalLength>3600</intervalLength><powerOfTenMultiplier>0</powerOfTenMultiplier><uom>72</uom>
</ReadingType></content></entry>
<entry><link rel="self" href="{base}/MeterReading/1/IntervalBlock/1"/>
<link rel="up" href="{base}/MeterReading/1/IntervalBlock"/>
<content><IntervalBlock xmlns="http://naesb.org/espi"><interval><duration>172800</duration>
<start>1751328000</start></interval>{readings}</IntervalBlock></content></entry>
</feed>"""


def _weather() -> str:
    return "read_at,air_temp_c\n" + "".join(
        f"{stamp}Z,{i % 30}\n" for i, stamp in enumerate(STAMPS)
    )


#: Kind, name of the file, content, and options it is taken in with.
SEEDS: list[tuple[str, str, bytes, dict[str, Any]]] = [
    ("loads", "long.csv", _long().encode(), {}),
    (
        "loads",
        "local.csv",
        _long(zone="").encode(),
        {"timezone": "America/Chicago", "stamps": "end"},
    ),
    ("loads", "semicolon.csv", _long(";", "\r\n").encode("utf-8-sig"), {}),
    ("loads", "tab.csv", _long("\t").encode(), {"interval": 60}),
    ("loads", "quoted.csv", _long().replace("A,", '"A",').encode(), {}),
    ("loads", "long.csv.gz", gzip.compress(_long().encode(), mtime=0), {}),
    ("loads", "long.csv.zst", _zst(_long()), {}),
    ("loads", "days.csv", _days().encode(), {"timezone": "America/Chicago"}),
    ("loads", "wide.csv", _wide().encode(), {}),
    ("loads", "table.parquet", _parquet(), {}),
    ("loads", "feed.xml", _green_button().encode(), {}),
    ("weather", "weather.csv", _weather().encode(), {}),
    ("units", "units.csv", UNITS.encode(), {}),
    ("connections", "connections.csv", CONNECTIONS.encode(), {"timezone": "America/Chicago"}),
    (
        "monthly",
        "monthly.csv",
        b"meter_id,month,kwh,class\nC,2025-07,700,home\nA,2025-06,650,\n",
        {},
    ),
    ("unmetered", "unmetered.csv", b"site_id,kw,hours\nS,0.4,dusk to dawn\nS2,1,always\n", {}),
]

#: What people and machines put into files.
INSERTED = [
    b"\0", b"\xff\xfe", b'"', b'""', b"\r", b"\r\n", b"\n\n", b",", b";", b"\t", b"=1+2", b"@SUM(A1)",
    b"\xc3\x28", b"nan", b"1e400", b"-", b"9" * 400, b"x" * 200_000, b",a" * 10_000, b"\xef\xbb\xbf",
    b"2025-07-01T00:00", b"</entry>", b"&lol;", b"<!DOCTYPE x [<!ENTITY lol 'lol'>]>", "é".encode(), b"\x1a",
]  # fmt: skip


# --- The mutator ----------------------------------------------------------------------------------


def _cut(rng: random.Random, data: bytes) -> bytes:
    return data[: rng.randrange(len(data) + 1)]


def _double(rng: random.Random, data: bytes) -> bytes:
    first, last = sorted(rng.choices(range(len(data) + 1), k=2))
    return data[:last] + data[first:]


def _drop(rng: random.Random, data: bytes) -> bytes:
    first = rng.randrange(len(data) + 1)
    return data[:first] + data[first + rng.randrange(1, 200) :]


def _swap(rng: random.Random, data: bytes) -> bytes:
    a, b, c = sorted(rng.choices(range(len(data) + 1), k=3))
    return data[:a] + data[b:c] + data[a:b] + data[c:]


def _corrupt(rng: random.Random, data: bytes) -> bytes:
    damaged = bytearray(data)
    for _ in range(rng.randrange(1, 12)):
        if damaged:
            damaged[rng.randrange(len(damaged))] = rng.randrange(256)
    return bytes(damaged)


def _insert(rng: random.Random, data: bytes) -> bytes:
    place = rng.randrange(len(data) + 1)
    return data[:place] + rng.choice(INSERTED) + data[place:]


def _shuffle_lines(rng: random.Random, data: bytes) -> bytes:
    head, *lines = data.split(b"\n")
    rng.shuffle(lines)
    return b"\n".join([head, *lines])


def _change_a_cell(rng: random.Random, data: bytes) -> bytes:
    lines = data.split(b"\n")
    place = rng.randrange(len(lines))
    cells = lines[place].split(b",")
    cells[rng.randrange(len(cells))] = rng.choice(INSERTED)
    lines[place] = b",".join(cells)
    return b"\n".join(lines)


def _recode(rng: random.Random, data: bytes) -> bytes:
    text = data.decode("latin-1")
    return text.encode(rng.choice(["utf-16", "utf-16-le", "utf-32", "utf-8"]))


def _empty(_: random.Random, data: bytes) -> bytes:
    del data
    return b""


MUTATIONS: list[Callable[[random.Random, bytes], bytes]] = [
    *[_cut, _double, _drop, _swap, _corrupt, _insert, _change_a_cell] * 3,
    *[_shuffle_lines, _recode, _empty],
]


def damaged(number: int) -> tuple[str, str, bytes, dict[str, Any]]:
    """Return the damaged file of a number: kind, name, content, options."""
    rng = random.Random(number)
    kind, name, data, options = rng.choice(SEEDS)
    packed = name.endswith(".gz") and rng.random() < 0.5
    if packed:
        data = gzip.decompress(data)
    for _ in range(rng.choice([1, 1, 1, 2, 3, 5])):
        data = rng.choice(MUTATIONS)(rng, data)
    return kind, name, gzip.compress(data, mtime=0) if packed else data, options


# --- The tests ------------------------------------------------------------------------------------


@pytest.fixture
def fresh(new_utility: Any, made_store: Any, tmp_path: Path) -> Callable[[], Any]:
    """Make utilities that know two sites and two meters."""
    store = made_store(("units", UNITS), ("connections", CONNECTIONS))
    return lambda: new_utility(Path(tempfile.mkdtemp(dir=tmp_path)), store)


def message_of(work: Callable[[], Any]) -> tuple[str | None, Any]:
    """Return what is said of what cannot be done, or the result; anything but our errors is a bug."""
    try:
        return None, work()
    except TrackerError as error:
        return str(error), None


def check(utility: Any, number: int) -> None:
    """Take one damaged file in; it goes in with all its rows accounted for, or is refused whole."""
    kind, name, data, options = damaged(number)
    path = (
        utility.file(data, f"{number}-{name}")
        if not name.endswith(".gz")
        else utility.folder / name
    )
    path.write_bytes(data)
    n_entry = utility.count(IntakeFile)
    said, report = message_of(
        lambda: take_files(utility.database, kind, [path], intake_options(**options))[0]
    )
    if said is not None:
        assert said.strip(), number
        assert "\n" not in said, number
        assert utility.count(IntakeFile) == n_entry, number
    else:
        assert utility.count(IntakeFile) == n_entry + 1, number
        assert report.refused == sum(report.reasons.values()), number
        assert all(each.line >= 1 and each.code and each.reason for each in report.refusals), number
        with utility.database.reading() as connection:
            entry = connection.execute(
                select(IntakeFile.id, IntakeFile.readings, IntakeFile.refused).order_by(
                    IntakeFile.id.desc()
                )
            ).first()
            refused = connection.scalar(
                select(func.count()).where(IntakeRefusal.file_key == entry.id)
            )
        assert (entry.readings, entry.refused) == (report.readings, refused), number
    problems = utility.problems()
    assert problems == [], (number, problems)
    path.unlink()


def run(fresh: Callable[[], Any], first: int) -> None:
    utility = fresh()
    for number in range(first, first + FILES_A_TEST):
        check(utility, number)


@pytest.mark.parametrize("first", range(0, 2_000, FILES_A_TEST))
def test_damaged_files(fresh, first) -> None:
    """Two thousand of them."""
    run(fresh, first)


@pytest.mark.slow
@pytest.mark.parametrize("first", range(2_000, 22_000, FILES_A_TEST))
def test_more_damaged_files(fresh, first) -> None:
    """Twenty thousand more, on demand."""
    run(fresh, first)


@pytest.mark.parametrize("seed", SEEDS, ids=lambda seed: seed[1])
def test_the_files_are_valid_before_they_are_damaged(fresh, seed) -> None:
    """Otherwise the mutator would only prove that bad files are refused."""
    kind, name, data, options = seed
    utility = fresh()
    path = utility.folder / name
    path.write_bytes(data)
    (report,) = take_files(utility.database, kind, [path], intake_options(**options))
    assert report.readings > 0
    assert report.refused == report.reasons.get("quality.missing", 0)
    assert utility.problems() == []


def test_lines_are_readings(fresh) -> None:
    """Counted from outside: every line after the first that is not empty has one fate."""
    rng = random.Random(7)
    lines = _long().splitlines()
    for _ in range(40):
        kept = [lines[0], *rng.choices(["", "A", "A,,,,,,,,", "M-1,x,1,2,", *lines[1:]], k=60)]
        utility = fresh()
        path = utility.file("\n".join(kept) + "\n")
        (report,) = take_files(utility.database, "loads", [path], intake_options(interval=60))
        assert report.readings == sum(bool(line) for line in kept[1:])
        utility.database.close()


def test_a_formula_in_an_id_is_text(fresh) -> None:
    """Taken and kept as it stands; it is disarmed where a table is written for a spreadsheet."""
    utility = fresh()
    text = "meter_id,read_at,kwh\n" + "".join(
        f"=1+2,2025-07-01T0{hour}:00Z,1\n" for hour in range(4)
    )
    report = utility.take("loads", text)
    assert report.fates.taken == 4
    assert utility.readings("=1+2").tolist() == [1.0] * 4


def test_a_folder_is_not_a_file(fresh) -> None:
    """One line that says so."""
    utility = fresh()
    (utility.folder / "empty").mkdir()
    with pytest.raises(TrackerError, match="the folder holds no file"):
        files_named([utility.folder / "empty"])
    with pytest.raises(TrackerError, match="is a folder"):
        take_files(utility.database, "loads", [utility.folder / "empty"])


GUIDE = b"""[columns]
meter_id = "Meter No"
read_at = "Time"
kwh = "Usage"

[units]
kwh = "Wh"

[file]
separator = ";"
decimal = ","

[readings]
timezone = "America/Chicago"

[quality]
A = "measured"
"""


@pytest.mark.parametrize("first", range(0, 400, 100))
def test_damaged_guides(tmp_path, first) -> None:
    """A guide is read or refused with one line; so is the file that a guide is drafted from."""
    for number in range(first, first + 100):
        rng = random.Random(number)
        path = tmp_path / "guide.toml"
        path.write_bytes(rng.choice(MUTATIONS)(rng, GUIDE))
        said, guide = message_of(lambda path=path: read_guide(path))
        assert guide or (said and "\n" not in said), number
        _, name, data, _ = damaged(number)
        path = tmp_path / name
        path.write_bytes(data)
        said, draft = message_of(lambda path=path: draft_guide(path))
        assert draft or (said and "\n" not in said), number
