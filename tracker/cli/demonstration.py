"""The demo: an invented utility's files, taken in like anybody's."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from tracker.assessment.run import AssessmentSummary, assess
from tracker.demo.larkmoor import write_larkmoor
from tracker.errors import InputError
from tracker.intake.files import Kind, take_file
from tracker.planning.priority import priority_list
from tracker.reports.tables import write_csv
from tracker.store.schema import open_database

if TYPE_CHECKING:
    from rich.console import Console

#: Stands in every folder the demo made, so that it never clears out anybody else's.
MARK = "INVENTED-DATA.txt"
MARK_TEXT = (
    "Larkmoor Rural Electric District is invented; any likeness is chance.\n"
    "`tracker demo` made the files of this folder and replaces them when it runs again.\n"
)
OWN_FILES = ("*.csv", "*.csv.gz", "tracker.db*")


@dataclass(frozen=True, slots=True)
class Demo:
    """What the demo made."""

    folder: Path
    store_url: str
    priority_file: Path
    n_reading: int
    summary: AssessmentSummary

    def as_json(self) -> dict[str, Any]:
        """Return it for `--json`."""
        return {
            "folder": self.folder,
            "store": self.store_url,
            "priority_list": self.priority_file,
            "readings": self.n_reading,
            "assessment": self.summary.as_json(),
        }

    def print(self, out: Console) -> None:
        """Say it in words."""
        out.print("Larkmoor Rural Electric District, an invented utility:", markup=False)
        out.print(f"  files and store in {self.folder}/, {self.n_reading:,} readings", markup=False)
        out.print(f"  {self.summary}", markup=False)
        out.print(f"  priority list in {self.priority_file}", markup=False)
        out.print(f"  look further with --store {self.store_url}", markup=False)


def make_demo(folder: Path, *, units: int, days: int, tell: Callable[[str, float], None]) -> Demo:
    """Write the utility's files, take them in, assess, and write the priority list.

    Raises
    ------
    InputError
        If the folder holds something else, or a size is out of range.
    """
    _clear(folder)
    files = write_larkmoor(
        folder, units=units, days=days, on_progress=lambda what, share: tell(what, 0.35 * share)
    )
    store_url = f"sqlite:///{folder / 'tracker.db'}"
    database = open_database(store_url)
    steps: Sequence[tuple[Kind, Path]] = [
        ("units", files.units),
        ("connections", files.connections),
        ("weather", files.weather),
        *(("loads", file) for file in files.loads),
    ]
    for done, (kind, file) in enumerate(steps):
        tell(f"taking in {file.name}", 0.35 + 0.55 * done / len(steps))
        take_file(database, kind, file)
    tell("assessing the fleet", 0.9)
    summary = assess(database)
    priority_file = folder / "priority_list.csv"
    write_csv(priority_list(database), priority_file)
    database.close()
    return Demo(folder, store_url, priority_file, files.n_reading, summary)


def _clear(folder: Path) -> None:
    if folder.exists() and not folder.is_dir():
        raise InputError(f"{folder} is a file. Name another folder with --folder.")
    if folder.is_dir() and any(folder.iterdir()) and not (folder / MARK).is_file():
        raise InputError(
            f"folder {folder} holds other files. Name an empty or new one with --folder."
        )
    try:
        folder.mkdir(parents=True, exist_ok=True)
        (folder / MARK).write_text(MARK_TEXT, encoding="utf-8")
        for pattern in OWN_FILES:
            for file in folder.glob(pattern):
                file.unlink()
    except OSError as error:
        raise InputError(f"folder {folder} cannot be written: {error.strerror}.") from error
