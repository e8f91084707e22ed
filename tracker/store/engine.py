"""Opening the database: the only module that knows a database URL or a PRAGMA."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Engine, create_engine, event
from sqlalchemy.engine import make_url
from sqlalchemy.exc import ArgumentError, DatabaseError, NoSuchModuleError

from tracker.errors import InputError, StoreError

WRITES = "tracker_writes"


def open_engine(url: str) -> Engine:
    """Return an engine with the settings every process must share.

    Raises
    ------
    InputError
        If the URL is none, names a database driver that is not installed, or a folder that is not there.
    """
    try:
        parsed = make_url(url)
        if parsed.get_backend_name() == "sqlite":
            _check_folder(parsed.database)
        engine = create_engine(parsed)
    except (ArgumentError, NoSuchModuleError, ModuleNotFoundError) as error:
        raise InputError(
            f"store = {url!r} is not a database URL this installation can open ({error}); "
            "allowed for instance sqlite:///tracker.db."
        ) from error
    if engine.dialect.name == "sqlite":
        _prepare_sqlite(engine)
    return engine


def _check_folder(database: str | None) -> None:
    if database and database != ":memory:" and not Path(database).parent.is_dir():
        raise InputError(
            f"store file {database} cannot be made: its folder is not there. Make the folder first."
        )


def _prepare_sqlite(engine: Engine) -> None:
    """WAL, foreign keys, and transactions begun by us: sqlite3 on its own begins them too late."""

    @event.listens_for(engine, "connect")
    def _set_pragmas(connection: Any, _record: Any) -> None:
        connection.isolation_level = None
        cursor = connection.cursor()
        for pragma in (
            "journal_mode=WAL",
            "synchronous=NORMAL",
            "foreign_keys=ON",
            "busy_timeout=5000",
            "cache_size=-65536",
            "mmap_size=1073741824",
        ):
            cursor.execute(f"PRAGMA {pragma}")
        cursor.close()

    @event.listens_for(engine, "begin")
    def _begin(connection: Connection) -> None:
        # A transaction that reads and then writes must take the write lock at once.
        writes = connection.get_execution_options().get(WRITES, False)
        connection.exec_driver_sql("BEGIN IMMEDIATE" if writes else "BEGIN")


class Database:
    """An open store: hands out connections, and says in plain words what went wrong."""

    def __init__(self, url: str) -> None:
        self.engine = open_engine(url)
        self.url = url

    @property
    def shown_url(self) -> str:
        """The URL without its password."""
        return self.engine.url.render_as_string(hide_password=True)

    @contextmanager
    def reading(self) -> Iterator[Connection]:
        """Give a connection with one consistent view of the data."""
        with self._translated(), self.engine.connect() as connection, connection.begin():
            yield connection

    @contextmanager
    def writing(self, *, keep: bool = True) -> Iterator[Connection]:
        """Give a connection in one transaction: all of it is kept, or nothing.

        With `keep` false nothing is, whatever happens: to see what would become of it.
        """
        with (
            self._translated(),
            self.engine.connect().execution_options(**{WRITES: True}) as connection,
            connection.begin() as transaction,
        ):
            yield connection
            if not keep:
                transaction.rollback()

    @contextmanager
    def _translated(self) -> Iterator[None]:
        try:
            yield
        except DatabaseError as error:
            raise StoreError(_plain_words(self.shown_url, error)) from error

    def close(self) -> None:
        """Close all connections."""
        self.engine.dispose()


def _plain_words(url: str, error: DatabaseError) -> str:
    cause = str(error.orig)
    if "not a database" in cause:
        return f"store {url} is not a database file. Name another file, or move this one away."
    if "locked" in cause:
        return f"store {url} is being written by another process. Wait until it is done, then try again."
    if "readonly" in cause:
        return f"store {url} cannot be written: the file or its folder is read-only."
    if "unable to open" in cause:
        return f"store {url} cannot be opened: no right to read or write the file or its folder."
    if "disk" in cause and "full" in cause:
        return f"store {url} cannot grow: the disk is full. Nothing of this step was kept."
    first_line = cause.splitlines()[0] if cause else type(error.orig).__name__
    return f"store {url} refused: {first_line}. `tracker store check` looks for damage."
