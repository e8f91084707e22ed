"""What all commands share: the store, plain or JSON answers, progress, dates."""

from __future__ import annotations

import datetime as dt
import json
import math
import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from tracker.errors import InputError

if TYPE_CHECKING:
    from rich.console import Console

    from tracker.store.engine import Database

DEFAULT_STORE = "sqlite:///tracker.db"

#: Width of tables when no terminal tells one.
PLAIN_WIDTH = 200

StoreOption = Annotated[
    str | None,
    typer.Option(
        "--store",
        metavar="URL",
        envvar="TRACKER_STORE",
        help=f"Store to work on, any SQLAlchemy URL; default {DEFAULT_STORE} in the working folder.",
    ),
]
JsonOption = Annotated[bool, typer.Option("--json", help="Answer in JSON, for scripts.")]
FromOption = Annotated[
    str | None,
    typer.Option(
        "--from", metavar="DATE", help="Begin here: ISO date or time; UTC unless it has an offset."
    ),
]
ToOption = Annotated[
    str | None,
    typer.Option(
        "--to", metavar="DATE", help="Up to, not including: ISO date or time, UTC likewise."
    ),
]


@contextmanager
def opened(url: str | None) -> Iterator[Database]:
    """Open the store of a command, and close it afterwards."""
    from tracker.store.schema import open_database

    database = open_database(url or DEFAULT_STORE)
    try:
        yield database
    finally:
        database.close()


def answer(data: Any, *, as_json: bool, plain: Callable[[Console], None]) -> None:
    """Print an answer on standard output, in JSON or for people."""
    if as_json:
        sys.stdout.write(json.dumps(_plain_data(data), ensure_ascii=False, indent=1) + "\n")
    else:
        plain(console())


def console(*, stderr: bool = False) -> Console:
    """Return a console; wide when nobody's terminal sets the width."""
    from rich.console import Console

    stream = sys.stderr if stderr else sys.stdout
    return Console(stderr=stderr, highlight=False, width=None if stream.isatty() else PLAIN_WIDTH)


def _plain_data(data: Any) -> Any:
    """Turn times into ISO text and NaN into null."""
    if isinstance(data, Mapping):
        return {key: _plain_data(value) for key, value in data.items()}
    if isinstance(data, (list, tuple)):
        return [_plain_data(value) for value in data]
    if isinstance(data, dt.datetime):
        return data.astimezone(dt.UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    if isinstance(data, Path):
        return str(data)
    if isinstance(data, float) and not math.isfinite(data):
        return None
    return data


def moment(text: str | None, option: str) -> dt.datetime | None:
    """Read a date or time of an option.

    Raises
    ------
    InputError
        If it is none.
    """
    if text is None:
        return None
    try:
        value = dt.datetime.fromisoformat(text)
        return value.astimezone(dt.UTC) if value.tzinfo else value.replace(tzinfo=dt.UTC)
    except (ValueError, OverflowError) as error:
        raise InputError(
            f"{option} = {text!r} is no ISO date or time, such as 2025-07-01 or 2025-07-01T05:00Z."
        ) from error


def shown(value: Any) -> str:
    """Return a figure as people read it: four significant digits, a dash where there is none."""
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return "–"
    if isinstance(value, dt.datetime):
        return f"{value:%Y-%m-%d %H:%M}Z"
    if isinstance(value, float):
        return f"{value:,.1f}" if abs(value) >= 1000 else f"{value:.4g}"
    return str(value)


def print_table(out: Console, columns: Sequence[str], rows: Sequence[Mapping[str, Any]]) -> None:
    """Print rows as a table; the headings are the names that files and options use."""
    from rich.table import Table
    from rich.text import Text

    table = Table(box=None, pad_edge=False, header_style="bold")
    for name in columns:
        texts = any(isinstance(row.get(name), str) for row in rows)
        table.add_column(name.replace("_", " "), justify="left" if texts else "right")
    for row in rows:
        table.add_row(*(Text(shown(row.get(name))) for name in columns))
    out.print(table)


@contextmanager
def progress(title: str) -> Iterator[Callable[[str, float], None]]:
    """Show a bar on a terminal; give a function to call with what is being done and its share."""
    from rich.progress import (
        BarColumn,
        Progress,
        TextColumn,
        TimeElapsedColumn,
        TimeRemainingColumn,
    )

    out = console(stderr=True)
    if not out.is_terminal:
        yield lambda _what, _share: None
        return
    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        TimeElapsedColumn(),
        TextColumn("left:"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=out, transient=True) as bar:
        task = bar.add_task(title, total=1.0)
        yield lambda what, share: bar.update(task, description=what, completed=share)


def say(text: str) -> None:
    """Tell a person something beside the answer."""
    console(stderr=True).print(text, markup=False)
