"""Bringing files in: one file, one transaction, one entry in the ledger."""

from __future__ import annotations

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from sqlalchemy import Connection

from tracker.collector import seldom_collected
from tracker.errors import InputError
from tracker.intake.connections import take_connections
from tracker.intake.loads import take_loads
from tracker.intake.readings import ReadingOptions
from tracker.intake.report import FileReport
from tracker.intake.source import Source, open_source
from tracker.intake.stamps import zone_of
from tracker.intake.units import take_units
from tracker.intake.weather import take_weather
from tracker.store import ledger
from tracker.store.engine import Database

if TYPE_CHECKING:
    import pandas as pd

Kind = Literal["units", "connections", "loads", "weather"]


@dataclass(frozen=True, slots=True)
class IntakeOptions:
    """How files are meant; what does not concern a kind of file is passed over."""

    reading: ReadingOptions = field(default_factory=ReadingOptions)
    quantity: str | None = None


@seldom_collected()
def take_file(
    database: Database,
    kind: Kind,
    given: Path | str | pd.DataFrame,
    options: IntakeOptions | None = None,
    *,
    dry_run: bool = False,
) -> FileReport:
    """Take a file, or a frame of the same columns, into the store.

    Parameters
    ----------
    dry_run : bool
        Say what would happen, and leave the store as it is.

    Raises
    ------
    InputError
        If the file is not there or an option is wrong.
    IntakeError
        If the file as a whole cannot be read; the store is left as it was.
    """
    options = options or IntakeOptions()
    source = open_source(given)
    with ThreadPoolExecutor(1) as beside, database.writing(keep=not dry_run) as connection:
        fingerprint = beside.submit(source.fingerprint)
        file_key = ledger.open_entry(
            connection, kind=kind, name=source.name, options=_noted(options)
        )
        report = _TAKERS[kind](connection, source, file_key, options)
        refusals = [asdict(refusal) for refusal in report.refusals]
        for refusal in refusals:
            del refusal["file"]
        ledger.close_entry(
            connection,
            file_key,
            fingerprint=fingerprint.result(),
            taken=report.fates.taken,
            unchanged=report.fates.unchanged,
            corrected=report.fates.corrected,
            refusals=refusals,
        )
    return report


def intake_options(
    *,
    timezone: str | None = None,
    stamps: str = "start",
    interval: int | None = None,
    power_factor: float | None = None,
    quantity: str | None = None,
) -> IntakeOptions:
    """Check options as people give them.

    Raises
    ------
    InputError
        If one is out of range.
    """
    if stamps not in ("start", "end"):
        raise InputError(f"stamps = {stamps!r} is not known; allowed: start, end.")
    reading = ReadingOptions(zone_of(timezone), stamps == "end", interval, power_factor)
    return IntakeOptions(reading, quantity)


def _noted(options: IntakeOptions) -> dict[str, Any]:
    reading = options.reading
    noted = asdict(replace(reading, timezone=None))
    noted["timezone"] = str(reading.timezone) if reading.timezone else None
    return {**noted, "quantity": options.quantity}


_TAKERS: dict[Kind, Callable[[Connection, Source, int, IntakeOptions], FileReport]] = {
    "units": lambda connection, source, _, options: take_units(
        connection, source, options.reading.timezone
    ),
    "connections": lambda connection, source, _, options: take_connections(
        connection, source, options.reading.timezone
    ),
    "loads": lambda connection, source, file_key, options: take_loads(
        connection, source, file_key, options.reading, options.quantity
    ),
    "weather": lambda connection, source, file_key, options: take_weather(
        connection, source, file_key, options.reading
    ),
}
