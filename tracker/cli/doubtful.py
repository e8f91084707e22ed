"""`tracker doubtful`: units whose figures suggest a wrong meter-to-unit connection."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from tracker.cli.common import JsonOption, StoreOption, answer, opened, progress, shown
from tracker.errors import InputError

if TYPE_CHECKING:
    from rich.console import Console


def doubtful(
    file: Annotated[
        Path | None, typer.Argument(metavar="FILE.csv", help="File to write them to.")
    ] = None,
    feeder: Annotated[str | None, typer.Option(help="Only this feeder.")] = None,
    top: Annotated[int | None, typer.Option(min=1, help="Only so many.")] = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> None:
    """List units whose figures suggest a wrong meter-to-unit connection, with the evidence."""
    from tracker.planning.doubtful import doubtful_connections, doubts_table
    from tracker.reports.tables import write_csv

    if file is not None and file.suffix.lower() != ".csv":
        raise InputError(f"file {file} has an unknown ending; allowed: .csv.")
    with opened(store) as database, progress("comparing sites with their neighbours"):
        rows = doubtful_connections(database, feeder=feeder)[:top]
    if file is not None:
        write_csv(doubts_table(rows), file)
    answer(rows, as_json=json_, plain=lambda out: _print_doubts(out, rows, file))


def _print_doubts(out: Console, rows: list[dict[str, Any]], file: Path | None) -> None:
    """Print each doubt under its unit, the evidence in full."""
    from tracker.planning.doubtful import NO_VERDICT

    def line(text: str, style: str | None = None) -> None:
        out.print(text, style=style, markup=False, soft_wrap=out.width >= 200)

    for row in rows:
        where = " · ".join(str(each) for each in (row["feeder"], row["site_id"]) if each)
        line(f"{row['rank']}  {row['unit_id']}  {row['doubt']}", style="bold")
        line(f"   {where}, {shown(row['rated_kva'])} kVA")
        if row["meter_id"] is not None:
            line(
                f"   {row['meter_id']}: written down at {row['site_id']}, may hang at "
                f"{row['other_site_id']} ({row['other_unit_id']})"
            )
        line(f"   {row['evidence']}.")
    units = len({row["unit_id"] for row in rows})
    line(f"\n{len(rows)} doubts at {units} units. {NO_VERDICT}" if rows else "No doubts.")
    if file is not None:
        line(f"{file}: {len(rows)} doubts")
