"""An invented utility to try things on: a store in a file of its own, and files to take in."""

from __future__ import annotations

import gzip
import shutil
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from sqlalchemy import func, select

from tracker.api import TransformerStore, intake_options
from tracker.intake.care import check_store
from tracker.intake.files import take_file
from tracker.intake.report import FileReport
from tracker.store.blocks import month_start_s, step_of, unpack
from tracker.store.engine import Database
from tracker.store.models import Base, ReadingBlock, Series, Site, SiteLoadBlock
from tracker.store.schema import open_database


class Utility:
    """A store, and short ways to bring text in and look at what became of it."""

    def __init__(self, folder: Path, store: Path) -> None:
        self.folder = folder
        shutil.copy(store, folder / "tracker.db")
        self.url = f"sqlite:///{folder / 'tracker.db'}"
        self.database: Database = open_database(self.url)

    def file(self, content: str | bytes, name: str = "file.csv") -> Path:
        """Write a file into the utility's folder."""
        path = self.folder / name
        data = content.encode() if isinstance(content, str) else content
        path.write_bytes(gzip.compress(data) if name.endswith(".gz") else data)
        return path

    def take(
        self, kind: Any, given: str | Path | pd.DataFrame, *, dry_run: bool = False, **options: Any
    ) -> FileReport:
        """Take in a text, a file or a frame."""
        if isinstance(given, str):
            given = self.file(given)
        return take_file(self.database, kind, given, intake_options(**options), dry_run=dry_run)

    def problems(self) -> list[str]:
        """Return what `store check` finds wrong."""
        return check_store(self.database)

    def count(self, table: type[Base]) -> int:
        """Return how many rows a table has."""
        with self.database.reading() as connection:
            return connection.scalar(select(func.count()).select_from(table)) or 0

    def site_load(self, site_id: str) -> pd.Series:
        """Return the load held of a site [kVA], by start of its interval."""
        return self._site(site_id, flags=False)

    def site_flags(self, site_id: str) -> pd.Series:
        """Return the quality flags of a site's load, by start of its interval."""
        return self._site(site_id, flags=True)

    def _site(self, site_id: str, *, flags: bool) -> pd.Series:
        query = (
            select(SiteLoadBlock.month, SiteLoadBlock.payload)
            .join(Site, Site.id == SiteLoadBlock.site_key)
            .where(Site.site_id == site_id)
            .order_by(SiteLoadBlock.month)
        )
        return self._unpacked(query, flags)

    def readings(self, name: str, quantity: str = "kw", kind: str = "meter") -> pd.Series:
        """Return the readings held of a series, by start of their interval."""
        query = (
            select(ReadingBlock.month, ReadingBlock.payload)
            .join(Series, Series.id == ReadingBlock.series_key)
            .where(Series.name == name, Series.kind == kind, ReadingBlock.quantity == quantity)
            .order_by(ReadingBlock.month)
        )
        return self._unpacked(query, flags=False)

    def _unpacked(self, query: Any, flags: bool) -> pd.Series:
        pieces = []
        with self.database.reading() as connection:
            for month, payload in connection.execute(query):
                values, quality = unpack([payload])
                start_s = month_start_s(month) + 60 * step_of(payload) * np.arange(values.shape[1])
                shown = quality[0] if flags else values[0].astype(float)
                index = pd.to_datetime(start_s, unit="s", utc=True)
                pieces.append(pd.Series(shown, index=index)[quality[0] != 0])
        return pd.concat(pieces) if pieces else pd.Series(dtype=float)


def fates(report: FileReport) -> tuple[int, int, int, int]:
    """Return how many rows were taken, unchanged, corrected and refused."""
    counts = report.fates
    return counts.taken, counts.unchanged, counts.corrected, report.refused


def hourly_csv(
    name: str,
    values: Any,
    start: str = "2025-07-01",
    *,
    heading: str = "unit_id,read_at,kva",
    freq: str = "h",
) -> str:
    """Return a long file of one series, stamps in UTC; NaN has no row."""
    stamps = pd.date_range(start, periods=len(values), freq=freq, tz="UTC")
    rows = [
        f"{name},{stamp:%Y-%m-%dT%H:%M}Z,{value:.6g}"
        for stamp, value in zip(stamps, values, strict=True)
        if not np.isnan(value)
    ]
    return "\n".join([heading, *rows]) + "\n"


@pytest.fixture(scope="session")
def empty_store(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """An empty store, made once and copied for each test."""
    path = tmp_path_factory.mktemp("empty") / "tracker.db"
    open_database(f"sqlite:///{path}").close()
    return path


@pytest.fixture
def new_utility(empty_store: Path) -> Iterator[Callable[..., Utility]]:
    """Make utilities, each in a folder of its own; their stores are copies, empty unless said."""
    made: list[Utility] = []

    def make(folder: Path, store: Path = empty_store) -> Utility:
        made.append(Utility(folder, store))
        return made[-1]

    yield make
    for each in made:
        each.database.close()


@pytest.fixture(scope="session")
def made_store(tmp_path_factory: pytest.TempPathFactory, empty_store: Path) -> Callable[..., Path]:
    """Make stores that hold some texts, (kind, text) by (kind, text); each once, to be copied."""
    made: dict[tuple[tuple[str, str], ...], Path] = {}

    def make(*texts: tuple[str, str]) -> Path:
        if texts not in made:
            utility = Utility(tmp_path_factory.mktemp("made"), empty_store)
            for kind, text in texts:
                utility.take(kind, text)
            utility.database.close()
            made[texts] = utility.folder / "tracker.db"
        return made[texts]

    return make


@pytest.fixture
def utility(tmp_path: Path, new_utility: Callable[..., Utility]) -> Utility:
    """A utility whose store is empty."""
    return new_utility(tmp_path)


@pytest.fixture(name="fates")
def fates_of() -> Any:
    """The four fates of a report as a tuple."""
    return fates


@pytest.fixture(name="hourly_csv")
def hourly_csv_of() -> Any:
    """A long file of one series."""
    return hourly_csv


@pytest.fixture(scope="session")
def summer(tmp_path_factory: pytest.TempPathFactory) -> Iterator[TransformerStore]:
    """Five units in a hot fortnight, assessed; to look at, not to change.

    HOT is far over its rating, WARM somewhat, COOL never; TWIN-A and TWIN-B are alike.
    """
    folder = tmp_path_factory.mktemp("summer")
    store = TransformerStore(f"sqlite:///{folder / 'tracker.db'}")
    store.import_units(
        pd.DataFrame(
            {
                "unit_id": ["HOT", "WARM", "COOL", "TWIN-B", "TWIN-A", "DARK"],
                "rated_kva": [25.0, 25.0, 25.0, 50.0, 50.0, 25.0],
                "feeder": ["F-1", "F-1", "F-2", "F-2", "F-2", None],
                "phases": [1, 1, 1, 3, 3, 1],
            }
        )
    )
    hour = np.arange(14 * 24)
    evening = 0.5 + np.exp(-(((hour % 24 - 23) / 3.0) ** 2))
    stamps = pd.date_range("2025-07-01", periods=len(hour), freq="h", tz="UTC")
    peaks = {"HOT": 55.0, "WARM": 26.0, "COOL": 8.0, "TWIN-A": 30.0, "TWIN-B": 30.0}
    loads = pd.concat(
        [
            pd.DataFrame({"unit_id": unit, "read_at": stamps, "kva": peak / 1.5 * evening})
            for unit, peak in peaks.items()
        ]
    )
    store.import_loads(loads)
    air = 28.0 + 8.0 * np.cos(2 * np.pi * (hour % 24 - 21) / 24)
    store.import_weather(pd.DataFrame({"read_at": stamps, "air_temp_c": air}))
    store.assess()
    yield store
    store.close()
