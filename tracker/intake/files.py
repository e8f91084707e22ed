"""Bringing files in: all files of one call in one transaction, one entry in the ledger for each."""

from __future__ import annotations

import glob
import time
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import asdict, dataclass, field, replace
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import msgspec
from sqlalchemy import Connection

from tracker.collector import seldom_collected
from tracker.errors import InputError
from tracker.intake.connections import take_connections
from tracker.intake.guide import ColumnGuide
from tracker.intake.loads import take_loads
from tracker.intake.monthly import take_monthly
from tracker.intake.readings import ReadingOptions
from tracker.intake.report import SHOWN_REFUSALS, FileReport, Outcome, Refusal
from tracker.intake.site_load import derive
from tracker.intake.source import Source, open_source
from tracker.intake.stamps import zone_of
from tracker.intake.units import take_units
from tracker.intake.unmetered import take_unmetered
from tracker.intake.weather import take_weather
from tracker.store import ledger
from tracker.store.engine import Database

if TYPE_CHECKING:
    import pandas as pd

Kind = Literal["units", "connections", "loads", "weather", "monthly", "unmetered"]

#: Endings of the files that are looked for in a folder, compressed or not.
ENDINGS = (".csv", ".txt", ".tsv", ".parquet", ".xml")
COMPRESSED = (".gz", ".zst")

#: Refusals written to the ledger at a time.
REFUSALS_A_BATCH = 10_000


@dataclass(frozen=True, slots=True)
class IntakeOptions:
    """How files are meant; what does not concern a kind of file is passed over."""

    reading: ReadingOptions = field(default_factory=ReadingOptions)
    quantity: str | None = None
    series: str = "meter"  #: what the headings of the layout with one column each are
    guide: ColumnGuide = field(default_factory=ColumnGuide)


#: Told what is being done, and the share of the whole that is done.
Tell = Callable[[str, float], None]

#: Called with refused rows as they are found.
OnRefusals = Callable[[Sequence[Refusal]], None]


def take_file(
    database: Database,
    kind: Kind,
    given: Path | str | pd.DataFrame,
    options: IntakeOptions | None = None,
    *,
    dry_run: bool = False,
) -> FileReport:
    """Take one file, or a frame of the same columns, into the store; see `take_files`."""
    (report,) = take_files(database, kind, [given], options, dry_run=dry_run)
    return report


@seldom_collected()
def take_files(
    database: Database,
    kind: Kind,
    given: Sequence[Path | str | pd.DataFrame],
    options: IntakeOptions | None = None,
    *,
    dry_run: bool = False,
    tell: Tell | None = None,
    on_refusals: OnRefusals | None = None,
) -> list[FileReport]:
    """Take files, or frames of the same columns, into the store: all of them, or none.

    Parameters
    ----------
    dry_run : bool
        Say what would happen, and leave the store as it is.
    tell : callable, optional
        Told how far it is.
    on_refusals : callable, optional
        Given every refused row, some at a time.

    Returns
    -------
    reports : list of FileReport
        One a file, in the order given.

    Raises
    ------
    InputError
        If a file is not there or an option is wrong.
    IntakeError
        If a file as a whole cannot be read. Whatever is raised, the store is left as it was.
    """
    options = options or IntakeOptions()
    progress = _Progress(given, tell)
    reports: list[FileReport] = []
    touched: set[tuple[int, int]] = set()
    with ThreadPoolExecutor(1) as beside, database.writing(keep=not dry_run) as connection:
        for each in given:
            source = open_source(each, options.guide)
            progress.begin(source)
            fingerprint = beside.submit(source.fingerprint)
            file_key = ledger.open_entry(
                connection, kind=kind, name=source.name, options=_noted(options)
            )
            outcome = _TAKERS[kind](connection, source, file_key, options)
            report = _reported(connection, kind, source, file_key, outcome, on_refusals)
            ledger.close_entry(
                connection,
                file_key,
                fingerprint=fingerprint.result(),
                **asdict(report.fates),
                refused=report.refused,
                facts=outcome.facts,
            )
            reports.append(report)
            touched |= outcome.touched
        if touched:
            progress.derive(touched)
            derived = derive(connection, touched)
            reports[-1] = replace(reports[-1], notes=[*reports[-1].notes, *derived.notes()])
            ledger.add_facts(connection, file_key, derived.as_facts())
    return reports


def _reported(
    connection: Connection,
    kind: str,
    source: Source,
    file_key: int,
    outcome: Outcome,
    on_refusals: OnRefusals | None,
) -> FileReport:
    """Look the refused rows up, write them to the ledger, and sum the file up."""
    refusals = source.refusals(outcome.findings)
    shown: list[Refusal] = []
    reasons: dict[str, int] = {}
    for batch in iter(lambda: list(islice(refusals, REFUSALS_A_BATCH)), []):
        shown += batch[: SHOWN_REFUSALS - len(shown)]
        rows = [asdict(refusal) for refusal in batch]
        for row in rows:
            del row["file"]
            reasons[row["code"]] = reasons.get(row["code"], 0) + 1
        ledger.add_refusals(connection, file_key, rows)
        if on_refusals:
            on_refusals(batch)
    return FileReport(
        source.name,
        kind,
        outcome.fates,
        sum(reasons.values()),
        shown,
        dict(sorted(reasons.items(), key=lambda each: (-each[1], each[0]))),
        outcome.left_out,
        outcome.notes,
    )


class _Progress:
    """Says how far an import is, by the bytes of its files."""

    def __init__(self, given: Iterable[Path | str | pd.DataFrame], tell: Tell | None) -> None:
        self._tell = tell
        paths = [Path(each) for each in given if isinstance(each, (str, Path))]
        self._total = sum(path.stat().st_size for path in paths if path.is_file()) or 1
        self._before = self._now = self._rows = 0
        self._began = time.monotonic()

    def begin(self, source: Source) -> None:
        """Begin with a file, whose batches then tell."""
        if self._tell is None:
            return
        tell, name = self._tell, Path(source.name).name
        self._before, self._now = self._now, self._now + source.n_bytes
        tell(f"taking in {name}", self._before / self._total)

        def seen(n_row: int) -> None:
            self._rows += n_row
            pace = self._rows / max(time.monotonic() - self._began, 1e-3)
            done = self._before + source.n_bytes * (source.share_read() or 0.0)
            tell(f"taking in {name}: {self._rows:,} rows, {pace:,.0f} a second", done / self._total)

        source.on_batch = seen

    def derive(self, touched: set[tuple[int, int]]) -> None:
        """Say that all files are read."""
        if self._tell is not None:
            self._tell(f"deriving the load of sites from {len(touched):,} meter-months", 1.0)


# --- What is given --------------------------------------------------------------------------------


def files_named(given: Iterable[Path]) -> list[Path]:
    """Return the files that paths, folders and patterns such as `2025-*.csv.gz` name.

    Raises
    ------
    InputError
        If one names nothing.
    """
    return [file for path in given for file in _named(path)]


def _named(path: Path) -> Iterator[Path]:
    if path.is_dir():
        found = [file for file in sorted(path.iterdir()) if file.is_file() and _is_data(file)]
        if not found:
            wanted = ", ".join(ENDINGS)
            raise InputError(
                f"{path}: the folder holds no file that ends in {wanted} (or those with .gz or .zst)."
            )
        yield from found
    elif not path.exists() and glob.has_magic(str(path)):
        # Path.glob takes no pattern with a root or with `..` in it.
        matching = sorted(Path(name) for name in glob.glob(str(path)))  # noqa: PTH207 - see above
        if not matching:
            raise InputError(f"{path}: no file matches this pattern.")
        yield from (file for file in matching if file.is_file())
    else:
        yield path


def _is_data(file: Path) -> bool:
    name = file.name.casefold()
    for ending in COMPRESSED:
        name = name.removesuffix(ending)
    return name.endswith(ENDINGS) and not name.startswith((".", "~"))


def intake_options(
    *,
    guide: ColumnGuide | None = None,
    timezone: str | None = None,
    stamps: str | None = None,
    interval: int | None = None,
    power_factor: float | None = None,
    quantity: str | None = None,
    series: str | None = None,
) -> IntakeOptions:
    """Check options as people give them; what they do not say, a column guide may.

    Raises
    ------
    InputError
        If one is out of range.
    """
    said = (guide or ColumnGuide()).readings
    stamps = stamps or said.stamps or "start"
    series = series or said.series or "meter"
    for name, value, allowed in (
        ("stamps", stamps, ("start", "end")),
        ("series", series, ("meter", "unit")),
    ):
        if value not in allowed:
            raise InputError(f"{name} = {value!r} is not known; allowed: {', '.join(allowed)}.")
    reading = ReadingOptions(
        zone_of(timezone or said.timezone),
        stamps == "end",
        said.interval_minutes if interval is None else interval,
        said.power_factor if power_factor is None else power_factor,
        said.stamp_format,
        said.date_format,
    )
    return IntakeOptions(reading, quantity or said.quantity, series, guide or ColumnGuide())


def _noted(options: IntakeOptions) -> dict[str, Any]:
    reading = options.reading
    noted = asdict(replace(reading, timezone=None))
    noted["timezone"] = str(reading.timezone) if reading.timezone else None
    return {
        **noted,
        "quantity": options.quantity,
        "series": options.series,
        "guide": msgspec.to_builtins(options.guide) if options.guide != ColumnGuide() else None,
    }


_TAKERS: dict[Kind, Callable[[Connection, Source, int, IntakeOptions], Outcome]] = {
    "units": lambda connection, source, _, options: take_units(
        connection, source, options.reading.timezone
    ),
    "connections": lambda connection, source, _, options: take_connections(
        connection, source, options.reading.timezone
    ),
    "loads": lambda connection, source, file_key, options: take_loads(
        connection, source, file_key, options.reading, options.quantity, options.series
    ),
    "weather": lambda connection, source, file_key, options: take_weather(
        connection, source, file_key, options.reading
    ),
    "monthly": lambda connection, source, file_key, options: take_monthly(
        connection, source, file_key, options.reading.timezone
    ),
    "unmetered": lambda connection, source, file_key, _: take_unmetered(
        connection, source, file_key
    ),
}
