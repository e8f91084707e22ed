"""Several files of one call: found, taken in as one, and written down in the ledger."""

from __future__ import annotations

import itertools

import pandas as pd
import pytest

from tracker.errors import InputError, IntakeError
from tracker.intake.files import files_named, take_files
from tracker.store.models import IntakeFile, ReadingBlock


@pytest.fixture
def site(new_utility, made_store, tmp_path):
    """One site with one meter, M."""
    units, connections = "unit_id,rated_kva,site_id\nT,25,S\n", "meter_id,site_id\nM,S\n"
    return new_utility(tmp_path, made_store(("units", units), ("connections", connections)))


def day(number: int, kwh: float = 1.0, hours: range = range(24)) -> str:
    rows = "".join(f"M,2025-07-{number:02d}T{hour:02d}:00Z,{kwh + hour}\n" for hour in hours)
    return f"meter_id,read_at,kwh\n{rows}"


# --- Found ----------------------------------------------------------------------------------------


def test_files_folders_and_patterns(tmp_path) -> None:
    """A folder means its data files, a pattern those that match; in the order of their names."""
    names = [
        "b.csv",
        "a.csv.gz",
        "c.parquet",
        "d.xml",
        "e.txt.zst",
        "notes.md",
        ".hidden.csv",
        "g.toml",
    ]
    for name in names:
        (tmp_path / name).touch()
    (tmp_path / "inner.csv").mkdir()
    found = [path.name for path in files_named([tmp_path])]
    assert found == ["a.csv.gz", "b.csv", "c.parquet", "d.xml", "e.txt.zst"]
    assert [path.name for path in files_named([tmp_path / "?.csv*"])] == ["a.csv.gz", "b.csv"]
    assert files_named([tmp_path / "b.csv"]) == [tmp_path / "b.csv"]


def test_what_names_nothing_is_said(tmp_path) -> None:
    """A typing error in a pattern must not end as an empty success."""
    with pytest.raises(InputError, match="no file matches"):
        files_named([tmp_path / "*.csv"])
    with pytest.raises(InputError, match="the folder holds no file that ends in"):
        files_named([tmp_path])


def test_a_file_whose_name_looks_like_a_pattern(site, fates) -> None:
    """Brackets are signs like any."""
    path = site.file(day(1), "loads [July].csv")
    assert files_named([path]) == [path]
    assert fates(site.take("loads", path)) == (24, 0, 0, 0)


# --- All or none ----------------------------------------------------------------------------------


def test_one_bad_file_keeps_all_out(site) -> None:
    """Nothing half-written: the person mends the one and gives them all again."""
    good = [site.file(day(number), f"{number}.csv") for number in (1, 2)]
    bad = site.file("", "empty.csv")
    with pytest.raises(IntakeError, match=r"empty\.csv: is empty"):
        take_files(site.database, "loads", [*good, bad])
    assert site.count(ReadingBlock) == 0
    assert site.count(IntakeFile) == 2  # units and connections
    reports = take_files(site.database, "loads", good)
    assert [report.fates.taken for report in reports] == [24, 24]
    assert site.problems() == []


def test_files_in_any_order_give_the_same_store(new_utility, made_store, tmp_path_factory) -> None:
    """Overlapping files, an hour of July in each; site loads alike bit for bit, whatever the order."""
    units, connections = "unit_id,rated_kva,site_id\nT,25,S\n", "meter_id,site_id\nM,S\n"
    empty = made_store(("units", units), ("connections", connections))
    texts = [day(1), day(2), day(1, hours=range(12, 24)), day(31), day(4)]
    seen = set()
    for order in itertools.islice(itertools.permutations(texts), 0, 120, 13):
        utility = new_utility(tmp_path_factory.mktemp("order"), empty)
        paths = [utility.file(text, f"{place}.csv") for place, text in enumerate(order)]
        half = len(paths) // 2
        take_files(utility.database, "loads", paths[:half])
        take_files(utility.database, "loads", paths[half:])
        load, flags = utility.site_load("S"), utility.site_flags("S")
        seen.add((load.to_csv(), flags.to_csv(), utility.readings("M").to_csv()))
        assert utility.problems() == []
    assert len(seen) == 1


def test_a_dry_run_of_many_files_sees_them_together(site) -> None:
    """The second file corrects the first, also when nothing is kept."""
    paths = [site.file(day(1, kwh), f"{kwh}.csv") for kwh in (1, 2)]
    reports = take_files(site.database, "loads", paths, dry_run=True)
    assert [(each.fates.taken, each.fates.corrected) for each in reports] == [(24, 0), (0, 24)]
    assert site.count(ReadingBlock) == 0


def test_progress_is_told(site) -> None:
    """Shares rise to the whole, and the rows are named."""
    told: list[tuple[str, float]] = []
    paths = [site.file(day(number), f"{number}.csv") for number in (1, 2, 3)]
    take_files(site.database, "loads", paths, tell=lambda what, share: told.append((what, share)))
    shares = [share for _, share in told]
    assert shares == sorted(shares)
    assert shares[-1] == 1.0
    assert any("72 rows" in what and "a second" in what for what, _ in told)


def test_frames_go_in_like_files(site, fates) -> None:
    """From a notebook."""
    frame = pd.DataFrame({"meter_id": "M", "read_at": ["2025-07-01T00:00Z"], "kwh": [1.0]})
    assert fates(site.take("loads", frame, interval=60)) == (1, 0, 0, 0)
