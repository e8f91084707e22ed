"""Rows of files in every form: what is read, what is refused, and on which line."""

from __future__ import annotations

import csv
import gc
import gzip
import io
import random
import tempfile
from pathlib import Path
from types import GeneratorType
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from tracker.errors import InputError, IntakeError
from tracker.intake import csv_source
from tracker.intake.guide import guide_from
from tracker.intake.report import Findings
from tracker.intake.source import Source, open_source

EXAMPLES = settings(
    max_examples=60,
    deadline=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.function_scoped_fixture],
)


def gz(data: bytes) -> bytes:
    """Pack bytes, without the time of day, which would change the names of the tests."""
    return gzip.compress(data, mtime=0)


def opened(folder: Path, content: bytes | str, guide: str = "", name: str = "file.csv") -> Source:
    path = folder / name
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return open_source(path, guide_from(guide))


def rows_of(source: Source) -> list[list[str | None]]:
    select = {f"t{place}": source.cell_at(place) for place in range(len(source.headings))}
    return [list(row.values()) for batch in source.batches(select) for row in batch.to_pylist()]


def found(source: Source, ordinals: list[int]) -> list[tuple[int, str, str]]:
    """Return line, code and text of what is refused; rows that were read are called "found"."""
    findings = Findings()
    findings.add(ordinals, "a", "found", "found")
    return [(each.line, each.code, each.text) for each in source.refusals(findings)]


def zst(data: bytes) -> bytes:
    sink = pa.BufferOutputStream()
    with pa.CompressedOutputStream(sink, "zstd") as stream:
        stream.write(data)
    return bytes(sink.getvalue().to_pybytes())


# --- Forms ----------------------------------------------------------------------------------------

TEXT = "meter_id,read_at,kwh\nA,2025-07-01T00:00Z,1.5\nB,2025-07-01T01:00Z,\n"
ROWS = [["A", "2025-07-01T00:00Z", "1.5"], ["B", "2025-07-01T01:00Z", None]]


@pytest.mark.parametrize(
    "content",
    [
        TEXT,
        TEXT.rstrip("\n"),
        TEXT.replace(",", ";"),
        TEXT.replace(",", "\t"),
        TEXT.replace(",", "|"),
        TEXT.replace("\n", "\r\n"),
        TEXT.replace("\n", "\r"),
        TEXT.replace("\n", "\r\n", 1),
        TEXT.replace("kwh\n", "kwh\r\n").replace("1.5\n", "1.5\r"),
        "\n \n" + TEXT,
        TEXT.replace("\nB", "\n\n\nB"),
        TEXT + "\n\n",
        TEXT.replace("A,", '"A",').replace("meter_id", '"meter_id"'),
        TEXT.encode("utf-8-sig"),
        TEXT.replace("meter_id", '"meter_id"').encode("utf-8-sig"),
        TEXT.encode("utf-16"),
        TEXT.encode("utf-32"),
        ("\ufeff" + TEXT).encode("utf-16-be"),
        gz(TEXT.encode()),
        gz(TEXT[:40].encode()) + gz(TEXT[40:].encode()),
        gz(TEXT.replace("\n", "\r\n", 1).encode("utf-16")),
        zst(TEXT.encode()),
        zst(TEXT[:30].encode()) + zst(TEXT[30:].encode()),
    ],
)
def test_one_table_in_many_forms(tmp_path, content) -> None:
    """Told by their content, whatever their name."""
    source = opened(tmp_path, content, name="anything")
    assert source.headings == ["meter_id", "read_at", "kwh"]
    assert rows_of(source) == ROWS
    assert found(source, []) == []
    assert source.left_out(["meter_id", "READ AT"]) == ["kwh"]


@pytest.mark.parametrize(
    ("content", "guide"),
    [
        (TEXT.encode("utf-16-le"), '[file]\nencoding = "utf-16-le"'),
        (TEXT.replace("A,", "Ä,").encode("latin-1"), '[file]\nencoding = "latin-1"'),
        (TEXT.replace("A,", "Ä,").encode("windows-1252"), '[file]\nencoding = "Windows-1252"'),
        ("Report; of, July\n\n" + TEXT, "[file]\nskip_lines = 2"),
        ('He said "x\n' + TEXT, "[file]\nskip_lines = 1"),
        ("a,b,c,d\r" + TEXT, "[file]\nskip_lines = 1"),
        (TEXT.replace(",", "|"), '[file]\nseparator = "|"'),
    ],
)
def test_what_a_guide_says_of_the_text(tmp_path, content, guide) -> None:
    """Encoding, lines before the headings, separator."""
    source = opened(tmp_path, content, guide)
    assert [row[1:] for row in rows_of(source)] == [row[1:] for row in ROWS]
    assert rows_of(source)[0][0] in ("A", "Ä")


def test_lines_before_the_headings_are_counted(tmp_path) -> None:
    """A refusal names the line an editor shows."""
    source = opened(tmp_path, "x\n\ny\n" + TEXT + "bad\n", "[file]\nskip_lines = 3")
    rows_of(source)
    assert found(source, [1]) == [(6, "found", "B,2025-07-01T01:00Z,"), (7, "row.columns", "bad")]


def test_a_comma_in_a_quoted_heading_is_no_separator(tmp_path) -> None:
    """As in "Usage, kWh"."""
    source = opened(tmp_path, '"Usage, net, kWh";"Time"\n1;2\n')
    assert source.headings == ["Usage, net, kWh", "Time"]


def test_headings_of_two_lines(tmp_path) -> None:
    """Spreadsheets break them."""
    source = opened(tmp_path, '"Usage\n(kWh)",b\n1,2\n3\n')
    assert source.headings == ["Usage (kWh)", "b"]
    assert rows_of(source) == [["1", "2"]]
    assert found(source, [0]) == [(3, "found", "1,2"), (4, "row.columns", "3")]


# --- Rows that no parser takes --------------------------------------------------------------------


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_every_row_has_its_line(tmp_path, end) -> None:
    """Broken rows are refused with their reason; those around them are read."""
    lines = [
        *(
            "a,b",
            "1,2",
            "3",
            "",
            "4,5,6",
            "7,8,",
            '"9","1""0"',
            '"11,12',
            "13,14",
            '"x"y,15',
            "16,17",
        ),
        *('"18', '19",20', ' "21" , "22"', '5" pipe,23', "=1+2,@x"),
    ]
    source = opened(tmp_path, end.join(lines))
    rows = rows_of(source)
    assert rows == [
        *(["1", "2"], ["7", "8"], ["9", '1"0'], ["13", "14"], ["16", "17"]),
        *(["18\n19", "20"], ["21", "22"], ['5" pipe', "23"], ["=1+2", "@x"]),
    ]
    assert found(source, list(range(len(rows)))) == [
        (2, "found", "1,2"),
        (3, "row.columns", "3"),
        (5, "row.columns", "4,5,6"),
        (6, "found", "7,8,"),
        (7, "found", '"9","1""0"'),
        (8, "row.quotes", '"11,12'),
        (9, "found", "13,14"),
        (10, "row.quotes", '"x"y,15'),
        (11, "found", "16,17"),
        (12, "found", '"18\n19",20'),
        (14, "found", ' "21" , "22"'),
        (15, "found", '5" pipe,23'),
        (16, "found", "=1+2,@x"),
    ]


def test_a_stray_quote_swallows_nothing(tmp_path) -> None:
    """A quoted line break is believed only in a record of as many fields as headings."""
    source = opened(tmp_path, 'a,b\nA,"2\nB,3\nC",4\nD,5\n')
    assert rows_of(source) == [["B", "3"], ['C"', "4"], ["D", "5"]]
    assert found(source, [0]) == [(2, "row.quotes", 'A,"2'), (3, "found", "B,3")]


def test_rows_that_are_no_text(tmp_path) -> None:
    """Bytes of another encoding spoil their row alone."""
    source = opened(tmp_path, b"a,b\n1,2\n\xe4,3\n4,5\n\xed\xa0\x80,6\n")
    assert rows_of(source) == [["1", "2"], ["4", "5"]]
    assert [each[:2] for each in found(source, [])] == [(3, "row.encoding"), (5, "row.encoding")]
    source = opened(tmp_path, "a,b\n\udcff1,2\n3,4\n".encode("utf-16", "surrogatepass"))
    assert rows_of(source) == [["3", "4"]]
    assert [each[:2] for each in found(source, [])] == [(2, "row.encoding")]


@pytest.mark.parametrize("n_byte", [2_200_000, 70_000_000])
def test_a_row_too_long_is_refused(tmp_path, n_byte) -> None:
    """It neither swallows others nor fills the memory; what is shown of it is short."""
    source = opened(tmp_path, b"a,b\n1,2\n" + b"x" * n_byte + b",3\n4,5\n")
    assert rows_of(source) == [["1", "2"], ["4", "5"]]
    (long, after) = found(source, [1])
    assert (long[0], long[1], len(long[2])) == (3, "row.too_long", 500)
    assert after == (4, "found", "4,5")


def test_a_row_just_short_enough_is_read(tmp_path) -> None:
    """60,000 columns are not too long."""
    wide = ",".join(["123456.789"] * 60_000)
    heading = ",".join(f"c{place}" for place in range(60_000))
    source = opened(tmp_path, f"{heading}\n{wide}\n1,2\n{wide}\n")
    select = {
        "cells": source.cells_at([0, 59_999]),
        "numbers": source.numbers_at([1, 59_998], "kwh"),
    }
    (batch,) = source.batches(select)
    assert batch.to_pylist() == [{"cells": ["123456.789"] * 2, "numbers": [123456.789] * 2}] * 2
    assert [each[:2] for each in found(source, [1])] == [(3, "row.columns"), (4, "found")]


def test_broken_rows_by_the_hundred_thousand(tmp_path) -> None:
    """All of them come out, each with its line, and no list of them is ever made."""
    rng = random.Random(3)
    lines, wanted = ["a,b,c"], []
    for number in range(2, 150_000):
        line = rng.choice(["1,2", "1,2,3", "1,2,3", "1,2,3,4", ""])
        lines.append(line)
        if line and line != "1,2,3":
            wanted.append(number)
    source = opened(tmp_path, "\n".join(lines) + "\n")
    assert len(rows_of(source)) == lines.count("1,2,3")
    refusals = source.refusals(Findings())
    assert isinstance(refusals, GeneratorType)
    assert [each.line for each in refusals] == wanted


def test_findings_keep_the_order_of_the_file(tmp_path) -> None:
    """Several of one row stay in the order they were noted."""
    source = opened(tmp_path, "a,b\n" + "1,2\n" * 30_000 + "x\n" + "3,4\n" * 30_000)
    rows_of(source)
    findings = Findings()
    findings.add(range(59_999, -1, -1), "b", "second", "r")
    findings.add([7], "a", "third", "r")
    refusals = list(source.refusals(findings))
    assert len(refusals) == 60_002
    assert [each.line for each in refusals] == sorted(each.line for each in refusals)
    assert [(each.line, each.code) for each in refusals[6:10]] == [
        *((8, "second"), (9, "second"), (9, "third"), (10, "second"))
    ]


PIECES = st.sampled_from(
    [
        *(b"1,2,3\n", b"1,2,3\n", b'"x",2,3\n', b'"a\nb",1,2\n', b' "q" ,2,3\n', b"\n", b"\n"),
        *(b"a", b"1", b",", b",", b'"', b'"', b'""', b" ", b"\t", b"\xff", b"\0", "é".encode()),
        *(b"\r", b"\r\n", b"\xed\xa0\x80"),
    ]
)


@given(pieces=st.lists(PIECES, max_size=25), packed=st.booleans(), wide=st.booleans())
@example([b'"x",2,3\n', b",", b",", b",", b","], False, False)
@example([b"1,2,3\n", b'"', b"1,2,3\n", b'"x",2,3\n'], True, False)
@example([b"1,2,3,,\n", b"\xff,1,2\n", b"1,2,3, \n", b"\n", b"1,2\n", b",,\n"], False, True)
@EXAMPLES
def test_no_line_is_lost(tmp_path, pieces, packed, wide) -> None:
    """Whatever stands in a file, each line that is not blank is read or refused, and just once."""
    data = b"a,b,c\n" + b"".join(pieces)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(csv_source, "MANY_HEADINGS", 2 if wide else 1_000)
        source = opened(tmp_path, gz(data) if packed else data)
        rows = rows_of(source)
    refusals = found(source, list(range(len(rows))))
    assert [code for _, code, _ in refusals].count("found") == len(rows)
    lines = (
        io.TextIOWrapper(io.BytesIO(data), "utf-8", errors="replace", newline=None)
        .read()
        .split("\n")
    )
    told = [line + more for line, _, text in refusals for more in range(text.count("\n") + 1)]
    assert told == sorted(set(told))
    assert {n for n, line in enumerate(lines, 1) if line and n > 1} <= set(told)


@given(
    rows=st.lists(
        st.lists(
            st.text(st.characters(codec="utf-8", exclude_characters="\0\r"), max_size=8),
            min_size=2,
            max_size=2,
        ),
        max_size=8,
    ),
    separator=st.sampled_from(",;\t"),
    quoting=st.sampled_from([csv.QUOTE_MINIMAL, csv.QUOTE_ALL]),
    end=st.sampled_from(["\n", "\r\n"]),
)
@EXAMPLES
def test_what_a_csv_writer_writes_is_read(tmp_path, rows, separator, quoting, end) -> None:
    """The standard library's writer is the other implementation; a row of blanks alone is none."""
    out = io.StringIO(newline="")
    writer = csv.writer(out, delimiter=separator, quoting=quoting, lineterminator=end)
    writer.writerows([["a", "b"], *rows])
    source = opened(tmp_path, out.getvalue())
    got = [[cell or "" for cell in row] for row in rows_of(source)]
    assert [[cell.strip(" ") for cell in row] for row in got] == [
        [cell.strip(" ") for cell in row] for row in rows
    ]
    assert found(source, []) == []


# --- Files that are none --------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "is empty"),
        (b"\n\r\n  \n", "is empty"),
        (gz(b""), "is empty"),
        (zst(b""), "is empty"),
        (b"\xff\xfe", "is empty"),
        (b"\xff,b\n1,2\n", "line 1 is not UTF-8 text.*column guide"),
        ("a,b\n1,2\n".encode("utf-16-le"), "NUL characters"),
        (gz(TEXT.encode())[:-1], "Truncated"),
        (gz(TEXT.encode())[:-9], "Truncated"),
        (gz(TEXT.encode())[:15], "cannot be read"),
        (gz(TEXT.encode()) + b"x", "cannot be read"),
        (zst(TEXT.encode())[:-1], "Truncated"),
        (zst(TEXT.encode())[:12], "Truncated"),
        (b"\x1f\x8bx", "cannot be read"),
        (b"\x28\xb5\x2f\xfdx", "cannot be read"),
        (b"PAR1" + b"x" * 50, "cannot be read"),
        (b"PAR1", "cannot be read"),
        (gz(b"PAR1" + b"x" * 50), "packed once more"),
        (b"<html></html>", "is no Green Button feed"),
        (b'"' + b"x" * 200_000 + b'",b\n', "holds no headings"),
    ],
)
def test_files_that_cannot_be_read(tmp_path, content, message) -> None:
    """One clear line, and nothing of them kept."""
    with pytest.raises(IntakeError, match=message) as raised:
        rows_of(opened(tmp_path, content))
    assert "\n" not in str(raised.value)
    assert "file.csv" in str(raised.value)


def test_packed_files_that_end_early_are_never_taken(tmp_path) -> None:
    """Cut anywhere, the file is refused as a whole: a parser alone would take its beginning for all."""
    rows = "".join(f"{n * 7919 % 10007},{n * 31337 % 9973}\n" for n in range(20_000))
    rng = random.Random(5)
    for pack in (gzip.compress, zst):
        packed = pack(f"a,b\n{rows}".encode())
        assert len(rows_of(opened(tmp_path, packed))) == 20_000
        for cut in [*range(1, 9), *(rng.randrange(9, len(packed) - 5) for _ in range(6))]:
            with pytest.raises(IntakeError):
                rows_of(opened(tmp_path, packed[:-cut]))


def test_a_packed_file_whose_checksum_does_not_hold(tmp_path) -> None:
    """A flipped bit is damage, even where the rest can be unpacked."""
    packed = bytearray(gz(TEXT.encode() * 1))
    packed[-6] ^= 1
    with pytest.raises(IntakeError, match="incorrect data check"):
        rows_of(opened(tmp_path, bytes(packed)))


def test_what_is_not_there(tmp_path) -> None:
    """A folder, a typing error, a name that no file can have."""
    for given_path, message in (
        (tmp_path, "is a folder"),
        (tmp_path / "nothing.csv", "is not there"),
        (str(tmp_path / "a\0b"), "no name of a file|is not there"),
    ):
        with pytest.raises(InputError, match=message):
            open_source(given_path)


def test_temporary_copies_go_when_the_source_goes(tmp_path, monkeypatch) -> None:
    """Tidied copies may be as large as the file."""
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path / "temporary"))
    (tmp_path / "temporary").mkdir()
    source = opened(tmp_path, '"a",b\r\n1,"2\n"x"y,3\n'.encode("utf-16"))
    rows_of(source)
    assert list((tmp_path / "temporary").rglob("*.csv"))
    del source
    gc.collect()
    assert list((tmp_path / "temporary").iterdir()) == []


def test_the_fingerprint_is_that_of_the_bytes(tmp_path) -> None:
    """The same file is known again, packed or not; one byte more is another file."""
    marks = [
        opened(tmp_path, content).fingerprint()
        for content in (
            TEXT,
            TEXT,
            TEXT + "\n",
            gz(TEXT.encode()),
            zst(TEXT.encode()),
        )
    ]
    assert marks[0] == marks[1]
    assert len(set(marks)) == 4


def test_how_much_has_been_read(tmp_path) -> None:
    """Rises while rows come, for a progress bar; each batch is told."""
    source = opened(tmp_path, "a,b\n" + "12345,67890\n" * 3_000_000)
    told: list[int] = []
    source.on_batch = told.append
    shares = [source.share_read() for _ in source.batches({"a": "c0"}, 100_000)]
    assert all(share is not None and 0 <= share <= 1 for share in shares)
    assert shares == sorted(shares)
    assert shares[0] < 1
    assert sum(told) == 3_000_000


# --- Headings -------------------------------------------------------------------------------------

GUIDE = """
[columns]
meter_id = "Device No"
kwh = ["Usage", "Verbrauch"]
rated_kva = "Size"
"""


def test_a_guide_renames_headings(tmp_path) -> None:
    """Compared like ours: without regard to case, spaces and underscores; messages keep the file's."""
    source = opened(tmp_path, "DEVICE_NO,verbrauch,Note\n1,2,3\n", GUIDE)
    assert source.headings == ["meter_id", "kwh", "Note"]
    assert source.has("Meter ID")
    assert not source.has("rated_kva")
    assert source.left_out(["meter_id"]) == ["verbrauch", "Note"]
    assert rows_of(source) == [["1", "2", "3"]]


def test_a_file_with_our_own_headings_needs_no_guide(tmp_path) -> None:
    """One guide may serve all files, also those that were written by our rules."""
    assert opened(tmp_path, "meter_id,kwh\n1,2\n", GUIDE).headings == ["meter_id", "kwh"]


def test_the_guide_stands_before_the_headings_of_the_file(tmp_path) -> None:
    """Where both are there, the column that the guide names is meant; the other is left out."""
    source = opened(tmp_path, "kwh,Usage,Device No\n1,2,3\n", GUIDE)
    (batch,) = source.batches({"kwh": source.cell_of("kwh")})
    assert batch.to_pylist() == [{"kwh": "2"}]
    assert source.left_out(["meter_id", "kwh"]) == ["kwh"]


def test_a_column_that_is_not_there_is_named(tmp_path) -> None:
    """With what the guide says of it, and what the file has."""
    source = opened(tmp_path, "Device,Usage\n1,2\n", GUIDE)
    with pytest.raises(
        IntakeError,
        match=r"no column 'meter_id' \(column guide names 'Device No' for it\); found Device, Usage",
    ):
        source.cell_of("meter_id")


@pytest.mark.parametrize(
    ("headings", "message"),
    [
        ("A1,b,a_1", r"'A1' stands twice in line 1 \(the other time as 'a_1'\)"),
        ("a1,b,a1", r"'a1' stands twice in line 1\. "),
    ],
)
def test_headings_that_match_each_other(tmp_path, headings, message) -> None:
    """An error only where that heading is asked for: two meters may be called a1 and A1."""
    source = opened(tmp_path, f"{headings}\n1,2,3\n")
    assert rows_of(source) == [["1", "2", "3"]]
    assert source.has("a1")
    assert source.cell_of("b") == "c1"
    with pytest.raises(IntakeError, match=message):
        source.cell_of("a1")


def test_two_names_of_a_guide_in_one_file(tmp_path) -> None:
    """Alternatives are for different files."""
    source = opened(tmp_path, "Usage,Verbrauch\n1,2\n", GUIDE)
    with pytest.raises(IntakeError, match=r"'Usage' stands twice.*'Verbrauch'.*column guide names"):
        source.number_of("kwh")


# --- Numbers --------------------------------------------------------------------------------------


def numbers(source: Source, heading: str) -> list[float | None]:
    """Return a column as numbers, asked for both alone and as one of many."""
    place = source.place_of(heading)
    select = {
        "alone": source.number_of(heading),
        "many": source.numbers_at([place, place], heading),
    }
    rows = [row for batch in source.batches(select) for row in batch.to_pylist()]
    assert all(row["many"] == [row["alone"]] * 2 for row in rows)
    return [row["alone"] for row in rows]


def column(cells: list[str], heading: str = "kwh") -> str:
    out = io.StringIO()
    csv.writer(out, delimiter="|").writerows([[heading, "x"], *[[cell, "x"] for cell in cells]])
    return out.getvalue()


@pytest.mark.parametrize(
    ("cells", "guide", "wanted"),
    [
        (["1.5", " 2 ", "-3", "+4", "1e3", ".5"], "", [1.5, 2, -3, 4, 1000, 0.5]),
        (["", "x", "nan", "inf", "-Infinity", "1e400", "1,5", "0x10"], "", [None] * 8),
        (["1,5", "-2,25", "3", "1e3"], '[file]\ndecimal = ","', [1.5, -2.25, 3, 1000]),
        (["1.5", "1.234,5", "1,2,3", "x"], '[file]\ndecimal = ","', [None] * 4),
        (
            ["1.234,5", "1.234.567", "-1.234", "12,5", "1234,5"],
            '[file]\ndecimal = ","\nthousands = "."',
            [1234.5, 1234567, -1234, 12.5, 1234.5],
        ),
        (
            ["1.23,5", "12.34", "1.2345", "1,234.5"],
            '[file]\ndecimal = ","\nthousands = "."',
            [None] * 4,
        ),
        (
            ["1,234.5", "12,345", "1.5", "1,23"],
            '[file]\nthousands = ","',
            [1234.5, 12345, 1.5, None],
        ),
        (["1 234.5", "1'234"], '[file]\nthousands = " "', [1234.5, None]),
        (["1'234.5", "7"], '[file]\nthousands = "\'"', [1234.5, 7]),
        (["1500"], '[units]\nkwh = "Wh"', [1.5]),
        (["1,5"], '[file]\ndecimal = ","\n[units]\nkwh = "MWh"', [1500.0]),
        (["3", "x", "nan"], "[units]\nkwh = 0.5", [1.5, None, None]),
        (["1e308"], '[units]\nkwh = "MWh"', [None]),
    ],
)
def test_numbers_as_a_guide_says(tmp_path, cells, guide, wanted) -> None:
    """A sign that is neither decimal sign nor between thousands makes no number, never another one."""
    assert numbers(opened(tmp_path, column(cells), guide), "kwh") == wanted


def test_temperatures_in_other_units(tmp_path) -> None:
    """Of degrees, not of differences."""
    text = column(["50", "-40"], "Temp")
    for unit, wanted in (("°F", [10.0, -40.0]), ("F", [10.0, -40.0]), ("K", [-223.15, -313.15])):
        source = opened(
            tmp_path, text, f'[columns]\nair_temp_c = "Temp"\n[units]\nair_temp_c = "{unit}"'
        )
        assert numbers(source, "air_temp_c") == pytest.approx(wanted)


@given(
    st.lists(st.decimals(-(10**9), 10**9, places=3), min_size=1, max_size=20),
    st.sampled_from([(".", None), (".", ","), (",", None), (",", "."), (",", " "), (".", "'")]),
)
@EXAMPLES
def test_numbers_however_written_are_what_was_meant(tmp_path, values, signs) -> None:
    """Written with a decimal sign and marks between thousands, read as the numbers they are."""
    decimal, thousands = signs
    cells = [
        f"{value:,.3f}".replace(",", "_").replace(".", decimal).replace("_", thousands or "")
        for value in values
    ]
    guide = f'[file]\ndecimal = "{decimal}"\n' + (f'thousands = "{thousands}"' if thousands else "")
    assert numbers(opened(tmp_path, column(cells), guide), "kwh") == [
        float(value) for value in values
    ]


def test_many_columns_of_numbers(tmp_path) -> None:
    """Ten thousand meters side by side; each in its place."""
    n = 10_000
    head = ",".join(["read_at", *(f"M-{place}" for place in range(n))])
    rows = "\n".join(
        ",".join([f"t{row}", *(str(place + row) for place in range(n))]) for row in range(3)
    )
    source = opened(tmp_path, f"{head}\n{rows}\n", '[units]\nkwh = "Wh"')
    (batch,) = source.batches({"kwh": source.numbers_at(range(1, n + 1), "kwh")})
    got = np.array(batch.column("kwh").to_pylist())
    np.testing.assert_array_equal(got, (np.arange(n) + np.arange(3)[:, np.newaxis]) / 1000)


# --- Tables with types ----------------------------------------------------------------------------


def frame() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "meter_id": ["A", "B", None],
            "read_at": pd.to_datetime(["2025-07-01T00:00", "2025-07-01T00:15", None], utc=True),
            "kwh": [1.5, np.nan, np.inf],
            "kw": np.array([0.1, 2, 3], dtype=np.float32),
            "date": pd.to_datetime(["2025-07-01", "2025-07-02", None]),
            "n": [1, 2, 3],
        }
    )


@pytest.fixture(params=["frame", "parquet"])
def table(request: Any, tmp_path: Path) -> Any:
    """Open a frame as it is, or by way of a Parquet file."""

    def opened_table(given_frame: pd.DataFrame, guide: str = "") -> Source:
        if request.param == "frame":
            return open_source(given_frame, guide_from(guide))
        given_frame.to_parquet(tmp_path / "table")
        return open_source(tmp_path / "table", guide_from(guide))

    return opened_table


def test_typed_columns_are_read_as_a_file_would_have_them(table) -> None:
    """Stamps as ISO 8601, dates without a time of day, numbers as they are."""
    source = table(frame())
    rows = rows_of(source)
    assert rows[0] == ["A", "2025-07-01 00:00:00+00", "1.5", "0.1", "2025-07-01", "1"]
    assert rows[2][0] is rows[2][1] is rows[2][4] is None
    assert numbers(source, "kwh") == [1.5, None, None]
    assert numbers(source, "kw") == [0.1, 2.0, 3.0]
    assert numbers(source, "n") == [1.0, 2.0, 3.0]


def test_stamps_without_a_zone_stay_without(table) -> None:
    """Local time, to be told apart from midnights that are dates by their heading."""
    source = table(
        pd.DataFrame({"read_at": pd.to_datetime(["2025-07-01", "2025-07-02"]), "kwh": [1, 2]})
    )
    assert rows_of(source)[0][0] == "2025-07-01 00:00:00"


def test_a_decimal_comma_concerns_texts_alone(table) -> None:
    """A number that has a type needs no signs; one written as text does."""
    given_frame = pd.DataFrame({"kwh": [1.5, 2.5], "kw": ["1,5", "1.5"]})
    source = table(given_frame, '[file]\ndecimal = ","\n[units]\nkwh = "Wh"')
    assert numbers(source, "kwh") == [0.0015, 0.0025]
    assert numbers(source, "kw") == [1.5, None]


def test_rows_refused_of_a_table(table) -> None:
    """Named by the line they would have in a file."""
    source = table(pd.DataFrame({"a": range(5_000), "b": ["x, y"] * 5_000}))
    rows_of(source)
    refusals = found(source, list(range(4_999, -1, -1)))
    assert refusals[0] == (2, "found", '0,"x, y"')
    assert [line for line, _, _ in refusals] == list(range(2, 5_002))


def test_tables_have_fingerprints(table) -> None:
    """Of their content."""
    marks = [table(each).fingerprint() for each in (frame(), frame(), frame().assign(kwh=1.0))]
    assert marks[0] == marks[1] != marks[2]


def test_parquet_of_every_type(tmp_path) -> None:
    """Decimals, dictionaries, whole numbers, nested columns and odd names."""
    made = pa.table(
        {
            'we "quote"': pa.array(["A", "B"]).dictionary_encode(),
            "kwh": pa.array([1, 2], pa.decimal128(9, 2)),
            "kw": pa.array([1, None], pa.uint16()),
            "list": [[1, 2], None],
            "read_at": pa.array([0, 1], pa.timestamp("ns", "America/Chicago")),
        }
    )
    pq.write_table(made, tmp_path / "a [1] 'x'.parquet")
    source = open_source(tmp_path / "a [1] 'x'.parquet")
    assert rows_of(source)[0] == ["A", "1.00", "1", "[1, 2]", "1970-01-01 00:00:00+00"]
    assert numbers(source, "kwh") == [1.0, 2.0]
    assert numbers(source, "kw") == [1.0, None]
    assert found(source, [1]) == [(3, "found", "B,2.00,,,1970-01-01 00:00:00.000000001+00")]


def test_damaged_parquet_is_refused_whole(tmp_path) -> None:
    """Wherever a byte is wrong: one line, or the table as it was."""
    out = io.BytesIO()
    pq.write_table(pa.Table.from_pandas(pd.DataFrame({"a": range(2_000), "b": ["x"] * 2_000})), out)
    rng = random.Random(1)
    for _ in range(60):
        data = bytearray(out.getvalue())
        for _ in range(3):
            data[rng.randrange(4, len(data))] = rng.randrange(256)
        try:
            rows_of(opened(tmp_path, bytes(data)))
        except IntakeError as error:
            said = str(error)
        else:
            said = ""
        assert "\n" not in said
