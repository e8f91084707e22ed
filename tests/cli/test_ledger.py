"""`tracker import report`: what became of every file."""

from __future__ import annotations

import csv
import os
import signal
import sqlite3
import subprocess
import sys
import time
from pathlib import Path

import pytest

UNITS = "unit_id,rated_kva,site_id\nT,25,S\n"
FIRST = "meter_id,read_at,kwh\n" + "".join(f"M,2025-07-01T{h:02d}:00Z,{h}\n" for h in range(24))
SECOND = (
    FIRST.replace("05:00Z,5\n", "05:00Z,7\n") + "M,2025-07-02T00:00Z,x\nN,2025-07-01T00:00Z,1\n"
)


@pytest.fixture
def taken(tracker, tmp_path: Path) -> Path:
    """Two files taken in: the second corrects a reading, brings a bad row and an unknown meter."""
    for name, text in (
        ("units.csv", UNITS),
        ("connections.csv", "meter_id,site_id\nM,S\n"),
        ("first.csv", FIRST),
        ("second.csv", SECOND),
    ):
        (tmp_path / name).write_text(text)
    assert tracker("import", "units", "units.csv").status == 0
    assert tracker("import", "connections", "connections.csv").status == 0
    for name in ("first.csv", "second.csv"):
        assert tracker("import", "loads", name).status == 0
    return tmp_path


def test_the_whole_ledger(tracker, taken) -> None:
    """Every file with its four fates, newest first; meters that hang nowhere."""
    found = tracker("import", "report", "--json").data
    assert [entry["name"] for entry in found["files"]] == [
        "second.csv",
        "first.csv",
        "connections.csv",
        "units.csv",
    ]
    for entry in found["files"]:
        parts = [entry[name] for name in ("taken", "unchanged", "corrected", "refused")]
        assert entry["readings"] == sum(parts)
    assert found["unconnected_meters"] == ["N"]
    words = tracker("import", "report").out
    assert "second.csv" in words
    assert "1 meters have readings and hang on no site: N" in words


def test_one_file(tracker, taken) -> None:
    """Line, column, code, sentence and text of what was refused; what was replaced, and by what."""
    found = tracker("import", "report", "second.csv", "--json").data
    assert [found[name] for name in ("taken", "unchanged", "corrected", "refused")] == [1, 23, 1, 1]
    (refusal,) = found["refusals"]
    assert (refusal["line"], refusal["column"], refusal["code"], refusal["text"]) == (
        26,
        "kwh",
        "value.not_a_number",
        "M,2025-07-02T00:00Z,x",
    )
    (replaced,) = found["replaced"]
    assert replaced == {
        "kind": "meter",
        "name": "M",
        "quantity": "kw",
        "interval_start": "2025-07-01T05:00:00Z",
        "former": 5.0,
        "now": 7.0,
    }
    words = tracker("import", "report", "second.csv").out
    assert "replaced: meter M, 2025-07-01 05:00Z, kw 5, now 7" in words
    assert "is no finite number" in words


def test_everything_as_files(tracker, taken) -> None:
    """For a spreadsheet."""
    answer = tracker(
        *("import", "report", "second.csv", "--refusals", "refused.csv"),
        *("--replaced", "replaced.csv", "--unconnected", "loose.csv"),
    )
    assert answer.status == 0
    for name, rows in (("refused.csv", 1), ("replaced.csv", 1), ("loose.csv", 1)):
        with (taken / name).open(newline="") as file:
            assert len(list(csv.DictReader(file))) == rows


def test_a_file_that_was_never_taken_in(tracker, taken) -> None:
    """One line, and where to look."""
    answer = tracker("import", "report", "third.csv")
    assert answer.status == 2
    assert answer.err == (
        "tracker: third.csv is not in the intake ledger. `tracker import report` lists what is.\n"
    )
    assert tracker("import", "report", "--replaced", "x.csv").status == 2


def test_a_folder_in_one_call(tracker, taken) -> None:
    """Contract: a folder or a pattern of files is fine."""
    (taken / "more").mkdir()
    (taken / "more" / "a.csv").write_text(FIRST)
    (taken / "more" / "b.csv").write_text(SECOND)
    found = tracker("import", "loads", "more", "more/*.csv", "--json").data
    assert (found["files"], found["readings"]) == (4, 100)


def being_written(folder: Path) -> bool:
    """Say whether another process is in the middle of a transaction."""
    connection = sqlite3.connect(folder / "tracker.db", timeout=0, isolation_level=None)
    try:
        connection.execute("BEGIN IMMEDIATE")
        connection.execute("ROLLBACK")
    except sqlite3.OperationalError:
        return True
    finally:
        connection.close()
    return False


@pytest.mark.skipif(os.name == "nt", reason="signals of Unix")
def test_ctrl_c_leaves_the_store_as_it_was(tracker, taken) -> None:
    """An import stopped midway has not happened."""
    big = taken / "big.csv"
    stamps = [
        f"2025-{m:02d}-{d:02d}T{h:02d}:00Z"
        for m in range(1, 7)
        for d in range(1, 29)
        for h in range(24)
    ]
    with big.open("w") as file:
        file.write("meter_id,read_at,kwh\n")
        for meter in range(600):
            file.writelines(f"B-{meter},{stamp},1\n" for stamp in stamps)

    def content() -> list[str]:
        with sqlite3.connect(taken / "tracker.db") as connection:
            dump = list(connection.iterdump())
        connection.close()
        return dump

    before = content()
    started = subprocess.Popen(
        [sys.executable, "-m", "tracker", "import", "loads", "big.csv"],
        cwd=taken,
        env={**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])},
        stderr=subprocess.PIPE,
        text=True,
    )
    deadline = time.monotonic() + 60
    while started.poll() is None and time.monotonic() < deadline and not being_written(taken):
        time.sleep(0.01)
    started.send_signal(signal.SIGINT)
    _, said = started.communicate(timeout=60)
    assert started.returncode == 130
    assert "Traceback" not in said
    assert content() == before
