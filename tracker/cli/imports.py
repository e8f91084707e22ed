"""`tracker import …`: files in."""

from __future__ import annotations

import csv
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from tracker.cli.common import (
    JsonOption,
    StoreOption,
    answer,
    opened,
    print_table,
    progress,
)
from tracker.errors import InputError

if TYPE_CHECKING:
    from rich.console import Console

    from tracker.intake.files import Kind, OnRefusals
    from tracker.intake.report import FileReport

app = typer.Typer(
    help="Bring files in: units, connections, loads, weather and more; and look at what became of them.",
    no_args_is_help=True,
    rich_markup_mode=None,
)

#: Refusals printed for a person; the rest are in the ledger and in --refusals.
SHOWN_REFUSALS = 10

#: Replaced readings in an answer in JSON; `--replaced FILE.csv` writes all.
SHOWN_REPLACED = 1_000

FilesArgument = Annotated[
    list[Path],
    typer.Argument(
        metavar="FILE…",
        help="Files, folders or patterns such as '2025-*.csv.gz'; all go in, or none.",
    ),
]
ColumnsOption = Annotated[
    Path | None,
    typer.Option(
        "--columns",
        metavar="GUIDE.toml",
        help="Column guide: what the file's headings and codes mean.",
    ),
]
ZoneOption = Annotated[
    str | None,
    typer.Option(help="IANA zone of times and dates without an offset, as America/Chicago."),
]
StampsOption = Annotated[
    str | None,
    typer.Option(
        help="Whether a stamp marks the start or the end of its interval; start unless said."
    ),
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
    columns: ColumnsOption = None,
    timezone: ZoneOption = None,
    dry_run: DryRunOption = False,
    strict: StrictOption = False,
    refusals: RefusalsOption = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> int:
    """Take in transformers: nameplates, and where each stands."""
    return _take(
        "units", files, columns, store, dry_run, strict, refusals, json_, timezone=timezone
    )


@app.command()
def connections(
    files: FilesArgument,
    columns: ColumnsOption = None,
    timezone: ZoneOption = None,
    dry_run: DryRunOption = False,
    strict: StrictOption = False,
    refusals: RefusalsOption = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> int:
    """Take in which meter hangs on which transformer or site."""
    return _take(
        "connections", files, columns, store, dry_run, strict, refusals, json_, timezone=timezone
    )


@app.command()
def loads(
    files: FilesArgument,
    columns: ColumnsOption = None,
    timezone: ZoneOption = None,
    stamps: StampsOption = None,
    interval: IntervalOption = None,
    power_factor: Annotated[
        float | None,
        typer.Option(
            help="Turns kWh and kW into kVA where no reactive reading stands beside; 0.95 unless said."
        ),
    ] = None,
    quantity: Annotated[
        str | None,
        typer.Option(
            help="What the cells of one row a day or one column a meter are, kwh unless said; of several "
            "value columns, the one to take: kwh, kvarh, kw, kva, kvar, amps_lv, amps_hv."
        ),
    ] = None,
    series: Annotated[
        str | None,
        typer.Option(help="What the headings of one column each are: meter (unless said) or unit."),
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
        columns,
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
        series=series,
    )


@app.command()
def weather(
    files: FilesArgument,
    columns: ColumnsOption = None,
    timezone: ZoneOption = None,
    stamps: StampsOption = None,
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
        columns,
        store,
        dry_run,
        strict,
        refusals,
        json_,
        timezone=timezone,
        stamps=stamps,
        interval=interval,
    )


@app.command()
def monthly(
    files: FilesArgument,
    columns: ColumnsOption = None,
    timezone: ZoneOption = None,
    dry_run: DryRunOption = False,
    strict: StrictOption = False,
    refusals: RefusalsOption = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> int:
    """Take in the energy of meters that are read once a month; it is spread over the hours."""
    return _take(
        "monthly", files, columns, store, dry_run, strict, refusals, json_, timezone=timezone
    )


@app.command()
def unmetered(
    files: FilesArgument,
    columns: ColumnsOption = None,
    dry_run: DryRunOption = False,
    strict: StrictOption = False,
    refusals: RefusalsOption = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> int:
    """Take in load that no meter reads, such as street lights."""
    return _take("unmetered", files, columns, store, dry_run, strict, refusals, json_)


def _take(
    kind: Kind,
    files: list[Path],
    columns: Path | None,
    store: str | None,
    dry_run: bool,
    strict: bool,
    refusals: Path | None,
    json_: bool,
    **options: Any,
) -> int:
    from tracker.intake.files import files_named, intake_options, take_files
    from tracker.intake.guide import read_guide
    from tracker.intake.report import as_json

    checked = intake_options(guide=read_guide(columns) if columns else None, **options)
    named = files_named(files)
    with (
        _refusals_written(refusals) as on_refusals,
        opened(store) as database,
        progress(f"taking in {kind}") as tell,
    ):
        reports = take_files(
            database, kind, named, checked, dry_run=dry_run, tell=tell, on_refusals=on_refusals
        )
    answer(
        as_json(reports),
        as_json=json_,
        plain=lambda out: _print(out, reports, dry_run=dry_run),
    )
    return 1 if strict and any(report.refused for report in reports) else 0


def _print(out: Console, reports: list[FileReport], *, dry_run: bool) -> None:
    for report in reports:
        fates = report.fates
        out.print(
            f"{report.file}: {report.readings:,} rows: {fates.taken:,} taken, "
            f"{fates.unchanged:,} unchanged, {fates.corrected:,} corrected, "
            f"{report.refused:,} refused",
            markup=False,
        )
        notes = list(report.notes)
        if report.left_out:
            notes.append(f"columns left out: {', '.join(report.left_out)}")
        if notes:
            out.print(f"  {'; '.join(notes)}", markup=False)
        for refusal in report.refusals[:SHOWN_REFUSALS]:
            out.print(f"  line {refusal.line}: {refusal.reason}", markup=False)
        if report.refused > SHOWN_REFUSALS:
            reasons = ", ".join(f"{count:,} {code}" for code, count in report.reasons.items())
            out.print(
                f"  … and {report.refused - SHOWN_REFUSALS:,} more ({reasons}); "
                "--refusals FILE.csv writes them all",
                markup=False,
            )
    if dry_run:
        out.print("Nothing was changed: this was a dry run.")


@contextmanager
def _refusals_written(path: Path | None) -> Iterator[OnRefusals | None]:
    """Give what writes refused rows to a file; it is tried before anything is taken in."""
    if path is None:
        yield None
        return
    columns = ("file", "line", "column", "code", "reason", "text")
    with _csv_written(path, columns) as writer:
        yield lambda refusals: writer.writerows(
            [getattr(refusal, name) for name in columns] for refusal in refusals
        )


@contextmanager
def _csv_written(path: Path, columns: Sequence[str]) -> Iterator[Any]:
    try:
        file = path.open("w", encoding="utf-8", newline="")
    except OSError as error:
        raise InputError(
            f"{path} cannot be written: {error.strerror}. Name a file in a folder of your own."
        ) from error
    with file:
        writer = csv.writer(file)
        writer.writerow(columns)
        yield writer


# --- Looking at what became of files --------------------------------------------------------------


@app.command()
def guide(
    file: Annotated[
        Path, typer.Argument(metavar="FILE", help="A file as the utility's system writes it.")
    ],
    out: Annotated[
        Path | None,
        typer.Option(
            "--out", metavar="GUIDE.toml", help="Write it here; on the screen unless said."
        ),
    ] = None,
    json_: JsonOption = False,
) -> int:
    """Draft a column guide from a file's headings and first rows, for a person to edit."""
    from tracker.intake.guide_draft import draft_guide

    text = draft_guide(file)
    if out is not None:
        _write_draft(out, text)
    answer(
        {"guide": text},
        as_json=json_,
        plain=lambda console: console.print(
            f"{out}: a draft. Read it, correct it, then give it to `tracker import … --columns {out}`."
            if out
            else text.rstrip(),
            markup=False,
            soft_wrap=True,
        ),
    )
    return 0


def _write_draft(path: Path, text: str) -> None:
    try:
        with path.open("x", encoding="utf-8") as file:
            file.write(text)
    except FileExistsError as error:
        raise InputError(
            f"{path} exists already. Name a new file, so that no edits are lost."
        ) from error
    except OSError as error:
        raise InputError(
            f"{path} cannot be written: {error.strerror}. Name a file in a folder of your own."
        ) from error


@app.command()
def report(
    file: Annotated[
        str | None,
        typer.Argument(
            metavar="[FILE]", help="A file taken in, by its name or path; all unless said."
        ),
    ] = None,
    refusals: RefusalsOption = None,
    replaced: Annotated[
        Path | None,
        typer.Option(
            metavar="FILE.csv", help="Write the readings that the file replaced, with both values."
        ),
    ] = None,
    unconnected: Annotated[
        Path | None,
        typer.Option(metavar="FILE.csv", help="Write the meters that hang on no site."),
    ] = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> int:
    """Show the intake ledger: what became of every file, or of one."""
    with opened(store) as database, database.reading() as connection:
        from tracker.store import ledger
        from tracker.store.readings import unconnected_meters

        loose = unconnected_meters(connection)
        if unconnected is not None:
            with _csv_written(unconnected, ("meter_id",)) as writer:
                writer.writerows([name] for name in loose)
        entries = ledger.entries(connection, file)
        if file is None:
            if refusals or replaced:
                raise InputError("--refusals and --replaced are of one file: name it.")
            _answer_ledger(entries, loose, json_=json_)
            return 0
        if not entries:
            raise InputError(
                f"{file} is not in the intake ledger. `tracker import report` lists what is."
            )
        newest = entries[0]
        if refusals is not None:
            columns = ("file", "line", "column", "code", "reason", "text")
            with _csv_written(refusals, columns) as writer:
                writer.writerows(
                    [newest["name"], *row.values()]
                    for row in ledger.refusals(connection, newest["id"])
                )
        if replaced is not None:
            columns = ("kind", "name", "quantity", "interval_start", "former", "now")
            with _csv_written(replaced, columns) as writer:
                writer.writerows(
                    [getattr(each, name) for name in columns]
                    for each in ledger.replaced(connection, newest["id"])
                )
        _answer_file(connection, entries, json_=json_)
    return 0


LEDGER_COLUMNS = (
    "imported_at",
    "kind",
    "name",
    "readings",
    "taken",
    "unchanged",
    "corrected",
    "refused",
)


def _answer_ledger(entries: list[dict[str, Any]], loose: list[str], *, json_: bool) -> None:
    def plain(out: Console) -> None:
        print_table(out, LEDGER_COLUMNS, entries)
        if loose:
            out.print(
                f"{len(loose):,} meters have readings and hang on no site: {', '.join(loose[:5])}"
                + (" … (--unconnected FILE.csv writes them all)" if len(loose) > 5 else ""),
                markup=False,
            )

    answer({"files": entries, "unconnected_meters": loose}, as_json=json_, plain=plain)


def _answer_file(connection: Any, entries: list[dict[str, Any]], *, json_: bool) -> None:
    from dataclasses import asdict
    from itertools import islice

    from tracker.intake.report import SHOWN_REFUSALS as SHOWN_IN_JSON
    from tracker.store import ledger

    newest = entries[0]
    reasons = ledger.refusals_by_code(connection, newest["id"])
    refusals = list(ledger.refusals(connection, newest["id"], SHOWN_IN_JSON))
    replaced = list(islice(ledger.replaced(connection, newest["id"]), SHOWN_REPLACED))
    data = {
        **newest,
        "imported_before": [entry["imported_at"] for entry in entries[1:]],
        "refused_by_reason": reasons,
        "refusals": refusals,
        "replaced": [asdict(each) for each in replaced],
    }

    def plain(out: Console) -> None:
        print_table(out, LEDGER_COLUMNS, entries)
        facts = {**newest["options"], **(newest["facts"] or {})}
        for name, value in facts.items():
            if value not in (None, "", [], {}, 0, False):
                out.print(f"  {name.replace('_', ' ')}: {value}", markup=False)
        for code, count in reasons.items():
            out.print(f"  refused, {code}: {count:,}", markup=False)
        for refusal in refusals[:SHOWN_REFUSALS]:
            out.print(f"  line {refusal['line']}: {refusal['reason']}", markup=False)
            out.print(f"    {refusal['text']}", markup=False)
        for each in replaced[:SHOWN_REFUSALS]:
            now = "–" if each.now is None else f"{each.now:.6g}"
            out.print(
                f"  replaced: {each.kind} {each.name}, {each.interval_start:%Y-%m-%d %H:%M}Z, "
                f"{each.quantity} {each.former:.6g}, now {now}",
                markup=False,
            )

    answer(data, as_json=json_, plain=plain)


MARK_COLUMNS = ("site_id", "name", "rule", "starts_at", "ends_at", "highest_kva", "set_aside")

#: Marks printed for a person.
SHOWN_MARKS = 40


@app.command()
def marks(
    file: Annotated[
        Path | None,
        typer.Argument(
            metavar="[FILE.csv]",
            help="Write all of them here; the first on the screen unless said.",
        ),
    ] = None,
    meter: Annotated[
        list[str] | None, typer.Option(help="Only of this meter; may be given several times.")
    ] = None,
    site: Annotated[
        list[str] | None, typer.Option(help="Only at this site; may be given several times.")
    ] = None,
    rule: Annotated[
        list[str] | None,
        typer.Option(help="Only by this rule: spike, stuck, zeros, negative, beyond."),
    ] = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> int:
    """List the readings that the rules of validation doubt or set aside."""
    from dataclasses import asdict
    from itertools import islice

    from tracker.intake.marks import reading_marks

    _check_known_rules(rule)
    with opened(store) as database, database.reading() as connection:
        found = (
            asdict(mark)
            for mark in reading_marks(connection, site_ids=site, names=meter, rules=rule)
        )
        if file is not None:
            with _csv_written(file, MARK_COLUMNS) as writer:
                n_written = 0
                for mark in found:
                    writer.writerow([mark[name] for name in MARK_COLUMNS])
                    n_written += 1
            answer(
                {"file": file, "marks": n_written},
                as_json=json_,
                plain=lambda out: out.print(f"{file}: {n_written:,} marks", markup=False),
            )
            return 0
        shown = list(found) if json_ else list(islice(found, SHOWN_MARKS + 1))

    def plain(out: Console) -> None:
        print_table(out, MARK_COLUMNS, shown[:SHOWN_MARKS])
        if not shown:
            out.print("The rules of validation find nothing.")
        if len(shown) > SHOWN_MARKS:
            out.print("… and more; FILE.csv takes them all.")

    answer({"marks": shown}, as_json=json_, plain=plain)
    return 0


def _check_known_rules(named: list[str] | None) -> None:
    from tracker.intake.validation import RULES

    known = [rule.name for rule in RULES]
    for name in named or ():
        if name not in known:
            raise InputError(f"rule = {name!r} is not known; allowed: {', '.join(known)}.")
