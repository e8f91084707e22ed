"""`tracker import …`: files in."""

from __future__ import annotations

import csv
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from tracker.cli.common import JsonOption, StoreOption, answer, opened, progress
from tracker.errors import InputError

if TYPE_CHECKING:
    from rich.console import Console

    from tracker.intake.files import IntakeOptions, Kind
    from tracker.intake.report import FileReport

app = typer.Typer(
    help="Bring files in: units, connections, loads, weather.",
    no_args_is_help=True,
    rich_markup_mode=None,
)

#: Refusals printed for a person; the rest are in the ledger and in --refusals.
SHOWN_REFUSALS = 10

FilesArgument = Annotated[
    list[Path], typer.Argument(metavar="FILE…", help="CSV files, plain or .gz.")
]
ZoneOption = Annotated[
    str | None,
    typer.Option(help="IANA zone of times and dates without an offset, as America/Chicago."),
]
StampsOption = Annotated[
    str, typer.Option(help="Whether a stamp marks the start or the end of its interval.")
]
IntervalOption = Annotated[
    int | None, typer.Option(help="Interval length in minutes; found from the data unless said.")
]
DryRunOption = Annotated[
    bool, typer.Option("--dry-run", help="Say what would happen, and change nothing.")
]
StrictOption = Annotated[
    bool, typer.Option("--strict", help="Exit with status 1 when a row was refused.")
]
RefusalsOption = Annotated[
    Path | None, typer.Option(metavar="FILE.csv", help="Write all refused rows to a file.")
]


@app.command()
def units(
    files: FilesArgument,
    timezone: ZoneOption = None,
    dry_run: DryRunOption = False,
    strict: StrictOption = False,
    refusals: RefusalsOption = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> int:
    """Take in transformers: nameplates, and where each stands."""
    return _take("units", files, store, dry_run, strict, refusals, json_, timezone=timezone)


@app.command()
def connections(
    files: FilesArgument,
    timezone: ZoneOption = None,
    dry_run: DryRunOption = False,
    strict: StrictOption = False,
    refusals: RefusalsOption = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> int:
    """Take in which meter hangs on which transformer or site."""
    return _take("connections", files, store, dry_run, strict, refusals, json_, timezone=timezone)


@app.command()
def loads(
    files: FilesArgument,
    timezone: ZoneOption = None,
    stamps: StampsOption = "start",
    interval: IntervalOption = None,
    power_factor: Annotated[
        float | None, typer.Option(help="Turns kWh and kW into kVA; 0.95 unless said.")
    ] = None,
    quantity: Annotated[
        str | None, typer.Option(help="What the cells of one row a day are: kwh, kw or kva.")
    ] = None,
    dry_run: DryRunOption = False,
    strict: StrictOption = False,
    refusals: RefusalsOption = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> int:
    """Take in interval readings, by meter or by unit."""
    return _take(
        "loads",
        files,
        store,
        dry_run,
        strict,
        refusals,
        json_,
        timezone=timezone,
        stamps=stamps,
        interval=interval,
        power_factor=power_factor,
        quantity=quantity,
    )


@app.command()
def weather(
    files: FilesArgument,
    timezone: ZoneOption = None,
    stamps: StampsOption = "start",
    interval: IntervalOption = None,
    dry_run: DryRunOption = False,
    strict: StrictOption = False,
    refusals: RefusalsOption = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> int:
    """Take in air temperatures."""
    return _take(
        "weather",
        files,
        store,
        dry_run,
        strict,
        refusals,
        json_,
        timezone=timezone,
        stamps=stamps,
        interval=interval,
    )


def _take(
    kind: Kind,
    files: list[Path],
    store: str | None,
    dry_run: bool,
    strict: bool,
    refusals: Path | None,
    json_: bool,
    **options: Any,
) -> int:
    from tracker.intake.files import intake_options
    from tracker.intake.report import as_json

    checked = intake_options(**options)
    if refusals is not None:
        _check_place(refusals)
    reports = _reports(kind, files, store, checked, dry_run)
    if refusals is not None:
        _write_refusals(refusals, reports)
    answer(
        as_json(reports),
        as_json=json_,
        plain=lambda out: _print(out, reports, dry_run=dry_run),
    )
    return 1 if strict and any(report.refusals for report in reports) else 0


def _reports(
    kind: Kind, files: list[Path], store: str | None, options: IntakeOptions, dry_run: bool
) -> list[FileReport]:
    from tracker.intake.files import take_file

    reports = []
    with opened(store) as database, progress(f"taking in {kind}") as tell:
        for done, file in enumerate(files):
            tell(f"taking in {file.name}", done / len(files))
            reports.append(take_file(database, kind, file, options, dry_run=dry_run))
    return reports


def _print(out: Console, reports: list[FileReport], *, dry_run: bool) -> None:
    for report in reports:
        fates = report.fates
        out.print(
            f"{report.file}: {report.readings:,} rows: {fates.taken:,} taken, "
            f"{fates.unchanged:,} unchanged, {fates.corrected:,} corrected, "
            f"{len(report.refusals):,} refused",
            markup=False,
        )
        notes = list(report.notes)
        if report.left_out:
            notes.append(f"columns left out: {', '.join(report.left_out)}")
        if notes:
            out.print(f"  {'; '.join(notes)}", markup=False)
        for refusal in report.refusals[:SHOWN_REFUSALS]:
            out.print(f"  line {refusal.line}: {refusal.reason}", markup=False)
        if len(report.refusals) > SHOWN_REFUSALS:
            more = len(report.refusals) - SHOWN_REFUSALS
            out.print(f"  … and {more:,} more; --refusals FILE.csv writes them all", markup=False)
    if dry_run:
        out.print("Nothing was changed: this was a dry run.")


def _check_place(path: Path) -> None:
    """Notice before anything is taken in that the refusals could not be written."""
    if path.is_dir() or not path.parent.is_dir():
        raise InputError(f"{path} cannot be written. Name a file in a folder that is there.")


def _write_refusals(path: Path, reports: list[FileReport]) -> None:
    columns = ("file", "line", "column", "code", "reason", "text")
    try:
        with path.open("w", encoding="utf-8", newline="") as file:
            writer = csv.writer(file)
            writer.writerow(columns)
            for report in reports:
                writer.writerows(
                    [getattr(refusal, name) for name in columns] for refusal in report.refusals
                )
    except OSError as error:
        raise InputError(
            f"{path} cannot be written: {error.strerror}. Name a file in a folder of your own."
        ) from error
