"""Commands: exit statuses, one line of error, and the shapes that scripts rely on."""

from __future__ import annotations

import csv
import gzip
import re
import shutil
import sqlite3
from pathlib import Path

import pytest

from tracker.store.schema import HEAD

UNITS = "unit_id,rated_kva,feeder\nT-1,10,F-1\nT-2,50,F-2\n=T-3,50,\n"
BAD_UNITS = "unit_id,rated_kva\nT-1,10\nT-2,none\n,5\n"


@pytest.fixture
def files(tmp_path: Path) -> Path:
    """A folder with files of a small utility, three days of it."""
    loads = [
        f"{unit},2025-07-{day:02d}T{hour:02d}:00Z,{kva}\n"
        for unit, kva in (("T-1", 14), ("T-2", 20), ("=T-3", 20))
        for day in (1, 2, 3)
        for hour in range(24)
    ]
    weather = [
        f"2025-07-{day:02d}T{hour:02d}:00Z,{25 + hour / 2}\n"
        for day in (1, 2, 3)
        for hour in range(24)
    ]
    (tmp_path / "units.csv").write_text(UNITS)
    (tmp_path / "bad.csv").write_text(BAD_UNITS)
    (tmp_path / "loads.csv").write_text("unit_id,read_at,kva\n" + "".join(loads))
    (tmp_path / "weather.csv").write_text("read_at,air_temp_c\n" + "".join(weather))
    return tmp_path


@pytest.fixture
def filled(tracker, files: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The store of that utility, taken in and assessed."""
    made = tmp_path_factory.getbasetemp() / "filled.db"
    if not made.exists():
        for kind in ("units", "loads", "weather"):
            assert tracker("import", kind, f"{kind}.csv").status == 0
        assert tracker("assess").status == 0
        shutil.copy(files / "tracker.db", made)
    else:
        shutil.copy(made, files / "tracker.db")
    return files


def is_one_line(answer) -> bool:
    """Say whether an error is a single line that names the program, and no traceback."""
    return (
        answer.out == ""
        and answer.err.startswith("tracker: ")
        and answer.err.count("\n") == 1
        and "Traceback" not in answer.err
    )


# --- Import ---------------------------------------------------------------------------------------


def test_import_in_words(tracker, files) -> None:
    """What was taken, what was not, and why."""
    answer = tracker("import", "units", "units.csv", "bad.csv")
    assert answer.status == 0
    assert "units.csv: 3 rows: 3 taken, 0 unchanged, 0 corrected, 0 refused" in answer.out
    assert "line 3: rated_kva = 'none' is not allowed" in answer.out
    assert (files / "tracker.db").is_file()


def test_import_in_json(tracker, files) -> None:
    """Contract, section 1: the shape that scripts read."""
    answer = tracker("import", "units", "units.csv", "bad.csv", "--json")
    found = answer.data
    assert list(found)[:7] == [
        *("files", "readings", "taken", "unchanged", "corrected", "refused", "refusals")
    ]
    assert [found[name] for name in list(found)[:6]] == [2, 6, 3, 1, 0, 2]
    assert set(found["refusals"][0]) == {"file", "line", "column", "code", "reason", "text"}
    assert found["refusals"][0]["file"] == "bad.csv"
    assert found["refusals"][0]["line"] == 3


def test_json_cuts_the_refusals_and_the_file_holds_them_all(tracker, files) -> None:
    """Contract: cut at 1,000, all of them with --refusals."""
    rows = "".join(f"U-{n},none\n" for n in range(1_200))
    (files / "many.csv").write_text("unit_id,rated_kva\n" + rows)
    answer = tracker("import", "units", "many.csv", "--json", "--refusals", "refused.csv")
    assert (answer.data["refused"], len(answer.data["refusals"])) == (1_200, 1_000)
    with (files / "refused.csv").open(newline="") as file:
        found = list(csv.DictReader(file))
    assert list(found[0]) == ["file", "line", "column", "code", "reason", "text"]
    assert len(found) == 1_200
    assert found[-1]["text"] == "U-1199,none"


def test_a_refusals_file_that_cannot_be_written_is_noticed_first(tracker, files) -> None:
    """Nothing half-done: not taken in first, and complained about afterwards."""
    answer = tracker("import", "units", "bad.csv", "--refusals", "nowhere/refused.csv")
    assert (answer.status, is_one_line(answer)) == (2, True)
    assert tracker("store", "info", "--json").data["units"] == 0


@pytest.mark.parametrize(("strict", "status"), [([], 0), (["--strict"], 1)])
def test_refused_rows_fail_only_when_strict(tracker, files, strict, status) -> None:
    """Contract: exit status 1 only with --strict."""
    assert tracker("import", "units", "bad.csv", *strict).status == status
    assert tracker("import", "units", "units.csv", *strict).status == 0


def test_a_dry_run_leaves_the_store_empty(tracker, files) -> None:
    """It says what would happen."""
    answer = tracker("import", "units", "units.csv", "--dry-run")
    assert "3 taken" in answer.out
    assert "dry run" in answer.out
    assert tracker("store", "info", "--json").data["units"] == 0


def test_options_reach_the_intake(tracker, files) -> None:
    """Zone, stamps, interval, power factor and quantity of the loads."""
    headings = ",".join(f"h{hour:02d}" for hour in range(1, 25))
    (files / "local.csv").write_text(f"unit_id,date,{headings}\nT-1,2025-07-05{',9' * 24}\n")
    tracker("import", "units", "units.csv")
    answer = tracker(
        *("import", "loads", "local.csv", "--timezone", "America/Chicago", "--quantity", "kw"),
        *("--power-factor", "0.9", "--interval", "60", "--stamps", "start"),
    )
    assert answer.status == 0
    tracker("import", "weather", "weather.csv")
    assert tracker("assess").status == 0
    tracker("trace", "T-1", "out.csv")
    first = (files / "out.csv").read_text().splitlines()[1].split(",")
    assert first[:2] == ["2025-07-05T05:00:00Z", "10"]


# --- Assess, rank, trace, export ------------------------------------------------------------------


def test_assess_in_words_and_json(tracker, filled) -> None:
    """The answer says how many units are in trouble."""
    assert "3 units from 2025-07-01 00:00 to 2025-07-04 00:00 UTC" in tracker("assess").out
    found = tracker("assess", "--json", "--to", "2025-07-03").data
    assert found["ends_at"] == "2025-07-03T00:00:00Z"
    assert (found["units"], found["units_over_rating"]) == (3, 1)


def test_rank(tracker, filled) -> None:
    """Hottest first, unless --by says otherwise; the heading names are those of the list."""
    rows = tracker("rank", "--json").data
    assert [row["unit_id"] for row in rows] == ["T-1", "=T-3", "T-2"]
    assert [row["rank"] for row in rows] == [1, 2, 3]
    assert re.fullmatch(r"2025-07-0\dT\d\d:00:00Z", rows[0]["peak_hot_spot_at"])
    assert [row["unit_id"] for row in tracker("rank", "--top", "1", "--json").data] == ["T-1"]
    by_rating = tracker("rank", "--by", "rated_kva", "--json").data
    assert [row["unit_id"] for row in by_rating] == ["=T-3", "T-2", "T-1"]
    one_feeder = tracker("rank", "--feeder", "F-2", "--json").data
    assert [row["unit_id"] for row in one_feeder] == ["T-2"]
    plain = tracker("rank").out
    assert "hot spot" in plain
    assert "no permission to energise" in plain


def test_trace(tracker, filled) -> None:
    """Contract, section 3: the headings of the file, an interval a row."""
    answer = tracker(
        "trace", "T-1", "t.csv", "--from", "2025-07-02", "--to", "2025-07-03", "--json"
    )
    assert answer.data == {"file": "t.csv", "unit_id": "T-1", "intervals": 24}
    lines = (filled / "t.csv").read_text().splitlines()
    assert lines[0] == "interval_start,load_kva,air_temp_c,top_oil_c,hot_spot_c,aging_factor"
    assert lines[1].startswith("2025-07-02T00:00:00Z,14,25,")
    assert len(lines) == 25


def test_export(tracker, filled) -> None:
    """The priority list, with ids no spreadsheet runs."""
    assert tracker("export", "list.csv", "--json").data == {"file": "list.csv", "units": 3}
    with (filled / "list.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert [row["unit_id"] for row in rows] == ["T-1", "'=T-3", "T-2"]
    assert rows[0]["suggested_kva"] == "15"


def test_store_commands(tracker, filled) -> None:
    """What it holds, that it is sound, and that it is up to date."""
    info = tracker("store", "info", "--json").data
    assert (info["units"], info["assessments"], info["revision"]) == (3, 1, HEAD)
    assert tracker("store", "check", "--json").data == {"sound": True, "problems": []}
    assert tracker("store", "upgrade", "--json").data == {"before": HEAD, "after": HEAD}


def test_an_unsound_store_exits_with_1(tracker, filled) -> None:
    """So that a nightly job stops before it believes the figures."""
    with sqlite3.connect(filled / "tracker.db") as connection:
        connection.execute("DELETE FROM site_load_block WHERE site_key = 1")
    connection.close()
    answer = tracker("store", "check")
    assert answer.status == 1
    assert "1 problems found" in answer.out


def test_names_with_brackets_are_printed_as_they_are(tracker, filled) -> None:
    """The printing library takes [/] for a sign to itself."""
    (filled / "odd.csv").write_text("unit_id,rated_kva\nA[/b],25\n")
    assert tracker("import", "units", "odd.csv").status == 0
    answer = tracker("trace", "A[/b]", "x[bold].csv")
    assert answer.status == 0
    assert "x[bold].csv" in answer.out
    assert "A[/b]" in answer.out
    assert "y[bold].csv" in tracker("export", "y[bold].csv").out


# --- What is wrong --------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "line",
    [
        "nonsense",
        "import nonsense units.csv",
        "import units",
        "import units nowhere.csv",
        "import units .",
        "import units loads.csv",
        "import loads units.csv",
        "import weather loads.csv",
        "import loads loads.csv --timezone Nowhere/Land",
        "import loads loads.csv --interval 7",
        "import loads loads.csv --interval soon",
        "import loads loads.csv --power-factor 1.5",
        "import loads loads.csv --power-factor nan",
        "import loads loads.csv --stamps middle",
        "import loads loads.csv --quantity mwh",
        "import units units.csv --store tracker.db",
        "import units units.csv --store sqlite:///nowhere/tracker.db",
        "import units units.csv --store postgresql://nobody@127.0.0.1:1/none",
        "import units units.csv --store sqlite:///units.csv",
        "assess --from yesterday",
        "assess --from 2025-07-01T00:30Z",
        "assess --from 0001-01-01T00:00+14:00",
        "assess --to 9999-12-31T23:00-10:00",
        "assess --from 2030-01-01",
        "assess --method guess",
        "assess --time-constant none",
        "assess --hot-spot-limit nan",
        "assess --hot-spot-limit 20",
        "assess --life-hours 0",
        "rank --by colour",
        "rank --top 0",
        "rank --top many",
        "rank --feeder F-9",
        "trace",
        "trace NOBODY out.csv",
        "trace T-1 out.txt",
        "trace T-1 nowhere/out.csv",
        "trace T-1 out.csv --from 2030-01-01",
        "export out.doc",
        "export nowhere/out.csv",
        "dashboard --port 99999",
        "demo --units 0 --no-dashboard",
        "demo --folder units.csv --no-dashboard",
        "demo --folder . --no-dashboard",
    ],
)
def test_bad_usage_is_one_line_and_status_2(tracker, filled, line) -> None:
    """Contract, section 3: one clear line on standard error, nothing half-written, no traceback."""
    before = sorted(each.name for each in filled.iterdir())
    answer = tracker(*line.split())
    assert answer.status == 2, answer
    assert is_one_line(answer), answer.err
    after = sorted(each.name for each in filled.iterdir() if "tracker.db-" not in each.name)
    assert after == [name for name in before if "tracker.db-" not in name]


@pytest.mark.parametrize("line", ["rank", "export out.csv", "assess", "trace T-1 out.csv"])
def test_an_empty_store_says_what_to_do_next(tracker, line) -> None:
    """The first thing many people will see."""
    answer = tracker(*line.split())
    assert (answer.status, is_one_line(answer)) == (2, True)


def test_a_cut_file_leaves_nothing_of_itself(tracker, files) -> None:
    """A transfer that broke off: the file is named, and nothing of it is in the store."""
    whole = files / "whole.csv.gz"
    whole.write_bytes(gzip.compress((files / "loads.csv").read_bytes())[:-200])
    tracker("import", "units", "units.csv")
    answer = tracker("import", "loads", "whole.csv.gz")
    assert (answer.status, is_one_line(answer)) == (2, True)
    assert "whole.csv.gz" in answer.err
    assert tracker("store", "info", "--json").data["units_measured"] == 0


# --- Which store ----------------------------------------------------------------------------------


def test_which_store(tracker, files, monkeypatch) -> None:
    """--store before TRACKER_STORE before tracker.db in the working folder."""
    monkeypatch.setenv("TRACKER_STORE", f"sqlite:///{files / 'named.db'}")
    tracker("import", "units", "units.csv")
    assert not (files / "tracker.db").exists()
    assert tracker("store", "info", "--json").data["units"] == 3
    option = ("--store", f"sqlite:///{files / 'option.db'}")
    assert tracker("store", "info", "--json", *option).data["units"] == 0
    monkeypatch.delenv("TRACKER_STORE")
    assert tracker("store", "info", "--json").data["units"] == 0
    assert (files / "tracker.db").exists()


# --- Processes of their own -----------------------------------------------------------------------


def test_python_m_tracker(process, files) -> None:
    """The same as `tracker`, with the store in the working folder."""
    assert process("import", "units", "units.csv").status == 0
    assert (files / "tracker.db").is_file()
    answer = process("rank")
    assert (answer.status, is_one_line(answer)) == (2, True)
    assert re.fullmatch(r"tracker \d+\.\d+\.\d+\n", process("--version").out)


def test_no_progress_bar_in_a_pipe(process, files) -> None:
    """Logs are not terminals."""
    answer = process("import", "units", "units.csv", "--json")
    assert answer.err == ""
    assert answer.data["taken"] == 3


def test_a_terminal_of_ascii_still_gets_an_answer(process, files) -> None:
    """Cron jobs run without a locale."""
    process("import", "units", "units.csv")
    answer = process("store", "info", LC_ALL="C", PYTHONIOENCODING="ascii", PYTHONUTF8="0")
    assert "Traceback" not in answer.err
    assert answer.status == 0


def test_a_small_demo(tracker, tmp_path) -> None:
    """The first command of the README, small: files, store and list in a folder of its own."""
    answer = tracker("demo", "--units", "6", "--days", "5", "--no-dashboard", "--json")
    assert answer.status == 0
    assert answer.data["assessment"]["units"] >= 6
    store = answer.data["store"]
    assert tracker("store", "check", "--store", store).status == 0
    rows = tracker("rank", "--store", store, "--json").data
    assert sum(row["peak_hot_spot_c"] is not None for row in rows) >= 6
    with (tmp_path / "larkmoor" / "priority_list.csv").open(newline="") as file:
        assert len(list(csv.DictReader(file))) == len(rows)
    again = tracker("demo", "--units", "6", "--days", "5", "--no-dashboard", "--json")
    assert again.data["readings"] == answer.data["readings"]
