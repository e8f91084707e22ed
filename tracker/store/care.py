"""What a store holds, and whether it is sound."""

from __future__ import annotations

import datetime as dt
import sqlite3
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, func, select, text

from tracker.errors import InputError, StoreError
from tracker.store.blocks import month_start_s, step_of, unpack, values_a_month
from tracker.store.engine import Database
from tracker.store.models import (
    Assessment,
    IntakeFile,
    IntakeRefusal,
    MeterConnection,
    ReadingBlock,
    Series,
    Site,
    SiteLoadBlock,
    SpreadBlock,
    SupersededBlock,
    Unit,
)
from tracker.store.results import latest_assessment
from tracker.store.schema import HEAD

BLOCK_TABLES = (ReadingBlock, SupersededBlock, SpreadBlock, SiteLoadBlock)

#: Blocks looked at in one go.
BLOCKS_A_QUERY = 5_000


def store_info(database: Database) -> dict[str, Any]:
    """Return what the store holds, in numbers."""
    with database.reading() as connection:

        def count(table: Any, *conditions: Any) -> int:
            query = select(func.count()).select_from(table).where(*conditions)
            return connection.scalar(query) or 0

        months = connection.execute(
            select(func.min(ReadingBlock.month), func.max(ReadingBlock.month))
        ).one()
        newest = latest_assessment(connection)
        return {
            "store": database.shown_url,
            "revision": HEAD,
            "size_mb": _size_mb(database),
            "units": count(Unit),
            "sites": count(Site),
            "meters": count(Series, Series.kind == "meter"),
            "connections": count(MeterConnection),
            "units_measured": count(Series, Series.kind == "unit"),
            "weather_stations": count(Series, Series.kind == "station"),
            "first_month": _month_name(months[0]),
            "last_month": _month_name(months[1]),
            "files_taken_in": count(IntakeFile),
            "rows_refused": count(IntakeRefusal),
            "assessments": count(Assessment, Assessment.finished_at.is_not(None)),
            "newest_assessment": newest.made_at if newest else None,
        }


def _size_mb(database: Database) -> float | None:
    path = database.engine.url.database
    if database.engine.dialect.name != "sqlite" or not path or not Path(path).is_file():
        return None
    return round(Path(path).stat().st_size / 1e6, 1)


def _month_name(month: int | None) -> str | None:
    if month is None:
        return None
    return f"{dt.datetime.fromtimestamp(month_start_s(month), dt.UTC):%Y-%m}"


def back_up(database: Database, path: Path) -> None:
    """Copy a SQLite store to a new file, also while others read or write it.

    Raises
    ------
    InputError
        If the file exists, cannot be written, or the store is no SQLite file.
    """
    if database.engine.dialect.name != "sqlite":
        raise InputError(
            f"store {database.shown_url} is no SQLite file. Back it up with its database's own tool."
        )
    if path.exists():
        raise InputError(f"{path} exists already. Name a new file.")
    try:
        with closing(sqlite3.connect(path)) as copy, database.reading() as connection:
            held: Any = connection.connection.driver_connection
            held.backup(copy)
    except sqlite3.Error as error:
        raise InputError(
            f"{path} cannot be written ({error}). Name a file in a folder of your own."
        ) from error


def damaged_blocks(connection: Connection) -> Iterator[str]:
    """Yield a line for every block that is not what it should be."""
    for table in BLOCK_TABLES:
        names = [column.name for column in table.metadata.tables[table.__tablename__].primary_key]
        columns = [getattr(table, name) for name in names]
        result = connection.execute(
            select(*columns, table.payload).execution_options(yield_per=BLOCKS_A_QUERY)
        )
        for row in result:
            problem = _problem(row.payload, row.month)
            if problem:
                where = ", ".join(f"{name} {getattr(row, name)}" for name in names)
                yield f"{table.__tablename__} ({where}): {problem}"


def _problem(payload: bytes, month: int) -> str | None:
    try:
        values, flags = unpack([payload])
    except StoreError as error:
        return str(error)
    if step_of(payload) == 0 or values.shape[1] != values_a_month(month, step_of(payload)):
        return "its length does not fit its month and step"
    if ((flags != 0) != (values == values)).any():  # noqa: PLR0124 - NaN
        return "values and flags disagree on where something is held"
    return None


def damaged_tables(connection: Connection) -> Iterator[str]:
    """Yield what the database itself finds wrong."""
    if connection.dialect.name == "sqlite":
        for (line,) in connection.execute(text("PRAGMA integrity_check")):
            if line != "ok":
                yield f"database: {line}"
        for row in connection.execute(text("PRAGMA foreign_key_check")):
            yield f"{row[0]} row {row[1]}: refers to a row of {row[2]} that is not there"
