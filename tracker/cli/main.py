"""`tracker`: the commands, and the one place that turns errors into a line and an exit status."""

from __future__ import annotations

import io
import sys
from pathlib import Path
from typing import Annotated, Any

import typer

from tracker.cli import doubtful, imports, stores
from tracker.cli.common import (
    FromOption,
    JsonOption,
    StoreOption,
    ToOption,
    answer,
    moment,
    opened,
    print_table,
    progress,
    say,
)
from tracker.errors import InputError, TrackerError
from tracker.version import __version__

app = typer.Typer(
    name="tracker",
    help="Hot spots, insulation life and replacement priorities of distribution transformers.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)
app.add_typer(imports.app, name="import")
app.add_typer(stores.app, name="store")

DONE, NOT_HELD, BAD_INPUT = 0, 1, 2

CAUTION = (
    "A computed temperature is no permission to energise, re-fuse or load a unit: the utility's own "
    "loading policy, the maker's data, local codes and licensed engineers decide."
)

RANK_COLUMNS = (
    "unit_id",
    "feeder",
    "rated_kva",
    "peak_load_pct",
    "peak_hot_spot_c",
    "peak_hot_spot_at",
    "hours_over_rating",
    "hours_over_hot_spot_limit",
    "aging_factor",
    "life_used_pct",
    "coverage_pct",
)


def run() -> None:
    """Run a command line and exit: 0 done, 1 a check does not hold, 2 bad usage or input."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")  # a terminal of few letters gets question marks
    try:
        status = app(standalone_mode=False)
    except TrackerError as error:
        _stop(str(error))
    except typer.Abort:
        _stop("stopped; the step that was under way left nothing behind.")
    except typer.TyperException as error:
        message = error.format_message() if hasattr(error, "format_message") else str(error)
        _stop(f"{' '.join(message.split())} `tracker --help` shows what there is.")
    except KeyboardInterrupt:
        _stop("stopped; the step that was under way left nothing behind.")
    except BrokenPipeError:
        sys.stderr.close()  # whoever read our answer has seen enough
        sys.exit(DONE)
    sys.exit(status if isinstance(status, int) else DONE)


def _stop(message: str) -> None:
    sys.stderr.write(f"tracker: {' '.join(message.split())}\n")
    sys.exit(BAD_INPUT)


@app.callback(invoke_without_command=True)
def _root(
    version: Annotated[bool, typer.Option("--version", help="Print the version and exit.")] = False,
) -> None:
    if version:
        sys.stdout.write(f"tracker {__version__}\n")
        raise typer.Exit


@app.command()
def demo(
    units: Annotated[
        int, typer.Option(min=1, max=100_000, help="Places with a transformer.")
    ] = 240,
    days: Annotated[int, typer.Option(min=2, max=1_100, help="Days of readings.")] = 365,
    folder: Annotated[Path, typer.Option(help="Where the files and their store go.")] = Path(
        "larkmoor"
    ),
    no_dashboard: Annotated[
        bool, typer.Option("--no-dashboard", help="Stop when the list is made.")
    ] = False,
    host: Annotated[str, typer.Option(help="Address the dashboard listens on.")] = "127.0.0.1",
    port: Annotated[int, typer.Option(help="Port of the dashboard.")] = 8050,
    json_: JsonOption = False,
) -> None:
    """Make an invented utility, take in its files, assess it, open the dashboard."""
    from tracker.cli.demonstration import make_demo

    with progress("inventing a utility") as tell:
        made = make_demo(folder, units=units, days=days, tell=tell)
    answer(made.as_json(), as_json=json_, plain=made.print)
    if not no_dashboard:
        _serve(made.store_url, host, port, open_browser=True)


@app.command()
def assess(
    from_: FromOption = None,
    to: ToOption = None,
    method: Annotated[str, typer.Option(help="Thermal method: c57.91.")] = "c57.91",
    time_constant: Annotated[
        str, typer.Option(help="Top-oil time constant: corrected each interval, or rated.")
    ] = "corrected",
    hot_spot_limit: Annotated[
        float, typer.Option(help="Hot spot that hours are counted over, °C.")
    ] = 140.0,
    life_hours: Annotated[
        float, typer.Option(help="Normal insulation life that life used is counted against, h.")
    ] = 180_000.0,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> None:
    """Run the thermal model over the fleet and store the figures."""
    from tracker.assessment.run import assess as run_assessment
    from tracker.settings import checked_settings

    settings = checked_settings(method, time_constant, hot_spot_limit, life_hours)
    starts_at, ends_at = moment(from_, "--from"), moment(to, "--to")
    with opened(store) as database, progress("assessing") as tell:
        summary = run_assessment(
            database,
            settings,
            starts_at=starts_at,
            ends_at=ends_at,
            on_progress=lambda share: tell("assessing", share),
        )
    answer(summary.as_json(), as_json=json_, plain=lambda out: out.print(str(summary)))


@app.command()
def rank(
    top: Annotated[int | None, typer.Option(min=1, help="Only so many units.")] = None,
    by: Annotated[
        str, typer.Option(metavar="COLUMN", help="Column to order by, largest first.")
    ] = "peak_hot_spot_c",
    feeder: Annotated[str | None, typer.Option(help="Only this feeder.")] = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> None:
    """Print the hot-spot ranking, hottest first unless --by says otherwise."""
    from tracker.planning.standing import why_apart
    from tracker.store import results

    direction = "asc" if by in results.TEXT_COLUMNS else "desc"
    with opened(store) as database, database.reading() as connection:
        assessment = results.latest_assessment(connection)
        if assessment is None:
            raise InputError("no assessment is held yet. Run `tracker assess` first.")
        filters = [results.Filter("feeder", "equals", feeder)] if feeder is not None else []
        if feeder is not None and feeder not in results.feeders(connection):
            known = ", ".join(results.feeders(connection)) or "none"
            raise InputError(f"feeder {feeder!r} is not in the store; there are: {known}.")
        page = results.ranking_page(
            connection, assessment.key, stop=top, sort=[(by, direction)], filters=filters
        )
    rows: list[dict[str, Any]] = []
    for place, row in enumerate(page.rows, start=1):
        apart = why_apart(row)
        del row["standing"]
        rows.append({"rank": place, **row, "apart": apart})

    def plain(out: Any) -> None:
        columns = RANK_COLUMNS if by in RANK_COLUMNS else (*RANK_COLUMNS, by)
        if any(row["apart"] for row in rows):
            columns = (*columns, "apart")
        print_table(out, ("rank", *columns), rows)
        out.print(
            f"\n{len(rows)} of {page.total} units, {assessment.starts_at:%Y-%m-%d} to "
            f"{assessment.ends_at:%Y-%m-%d}, limit {assessment.settings['hot_spot_limit_c']:g} °C. "
            f"{CAUTION}"
        )

    answer(rows, as_json=json_, plain=plain)


app.command()(doubtful.doubtful)


@app.command()
def trace(
    unit: Annotated[str, typer.Argument(help="Unit id.")],
    file: Annotated[Path, typer.Argument(metavar="FILE.csv", help="File to write.")],
    from_: FromOption = None,
    to: ToOption = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> None:
    """Write one unit hour by hour: load, air, top oil, hot spot, aging."""
    from tracker.assessment.trace import unit_trace
    from tracker.reports.tables import trace_table, write_csv

    _check_ending(file, (".csv",))
    starts_at, ends_at = moment(from_, "--from"), moment(to, "--to")
    with opened(store) as database:
        table = trace_table(unit_trace(database, unit, starts_at=starts_at, ends_at=ends_at))
    write_csv(table, file)
    answer(
        {"file": file, "unit_id": unit, "intervals": len(table)},
        as_json=json_,
        plain=lambda out: out.print(
            f"{file}: {len(table):,} intervals of unit {unit}", markup=False
        ),
    )


@app.command()
def export(
    file: Annotated[Path, typer.Argument(metavar="FILE.csv", help="File to write.")],
    store: StoreOption = None,
    json_: JsonOption = False,
) -> None:
    """Write the replacement priority list."""
    from tracker.planning.priority import priority_list
    from tracker.reports.tables import write_csv

    _check_ending(file, (".csv",))
    with opened(store) as database:
        table = priority_list(database)
    write_csv(table, file)
    answer(
        {"file": file, "units": len(table)},
        as_json=json_,
        plain=lambda out: out.print(
            f"{file}: {len(table):,} units, most urgent first", markup=False
        ),
    )


def _check_ending(file: Path, endings: tuple[str, ...]) -> None:
    if file.suffix.lower() not in endings:
        raise InputError(f"file {file} has an unknown ending; allowed: {', '.join(endings)}.")


@app.command()
def dashboard(
    host: Annotated[str, typer.Option(help="Address to listen on.")] = "127.0.0.1",
    port: Annotated[int, typer.Option(min=0, max=65535, help="Port to listen on.")] = 8050,
    store: StoreOption = None,
) -> None:
    """Serve the dashboard until it is stopped."""
    from tracker.cli.common import DEFAULT_STORE

    _serve(store or DEFAULT_STORE, host, port, open_browser=False)


def _serve(store_url: str, host: str, port: int, *, open_browser: bool) -> None:
    from tracker.cli.browser import open_in_browser
    from tracker.dashboard.serve import serve

    def ready(url: str) -> None:
        say(f"dashboard at {url} (Ctrl-C stops it)")
        if open_browser:
            open_in_browser(url)

    serve(store_url, host, port, ready=ready)


@app.command()
def verify(json_: JsonOption = False) -> int:
    """Recompute every published check value and print value, ours, difference and source."""
    from tracker.verification import checks

    rows = [check.as_row() for check in checks()]
    wrong = [row for row in rows if not row["holds"]]

    answer(rows, as_json=json_, plain=lambda out: _print_checks(out, rows))
    return NOT_HELD if wrong else DONE


def _print_checks(out: Any, rows: list[dict[str, Any]]) -> None:
    """Print check values under their sources; those that are off once more at the end."""

    def line(text: str, style: str | None = None) -> None:
        out.print(text, style=style, markup=False, soft_wrap=True)

    source = None
    for row in rows:
        if row["source"] != source:
            source = row["source"]
            line(f"\n{source} ({row['held']})", style="bold")
            line(f"{'value':>10}{'ours':>14}{'difference':>12}{'allowed':>10}")
        line(_check_line(row))
    wrong = [row for row in rows if not row["holds"]]
    line(f"\n{len(rows) - len(wrong)} of {len(rows)} values hold.")
    for row in wrong:
        line(f"{_check_line(row)} ({row['source']})")


def _check_line(row: dict[str, Any]) -> str:
    difference = f"{row['difference']:+.1e}" if row["difference"] else "0"
    return (
        f"{row['value']:>10}{row['ours']:>14.7g}{difference:>12}{row['allowed']:>10.0e}"
        f"  {row['what']}{'' if row['holds'] else ': OFF'}"
    )
