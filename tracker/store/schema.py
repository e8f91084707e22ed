"""The store's revision: made new on the fly, upgraded only when asked, never used when newer."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from sqlalchemy import Connection, inspect, text

from tracker.errors import StoreError
from tracker.store.engine import Database

#: The newest revision this program knows; a test holds it equal to the newest migration.
HEAD = "0002"


def open_database(url: str) -> Database:
    """Open the store at `url`, making it when there is none.

    Raises
    ------
    StoreError
        If the store is older or newer than this program, or holds something else.
    """
    database = Database(url)
    with database.reading() as connection:
        revision = _revision_of(connection, database)
    if revision is None:
        upgrade(database)
    elif revision < HEAD:
        raise StoreError(
            f"store {database.shown_url} is at revision {revision}, this program needs {HEAD}. "
            "Back it up, then run `tracker store upgrade`."
        )
    return database


def upgrade(database: Database) -> tuple[str | None, str]:
    """Bring the store to the newest revision; return the revisions before and after."""
    from alembic import command  # noqa: PLC0415 - heavy, and needed only when a store is made or upgraded
    from alembic.config import Config  # noqa: PLC0415

    with database.reading() as connection:
        before = _revision_of(connection, database)
    if before != HEAD:
        config = Config()
        config.set_main_option("script_location", str(migrations_folder()).replace("%", "%%"))
        with database.writing() as connection:
            config.attributes["connection"] = connection
            command.upgrade(config, "head")
    return before, HEAD


def migrations_folder() -> Path:
    """Return the folder of the migrations: inside an installed package, or beside it in a checkout."""
    package = Path(__file__).resolve().parents[1]
    shipped = package / "_migrations"
    return shipped if shipped.is_dir() else package.parent / "migrations"


def _revision_of(connection: Connection, database: Database) -> str | None:
    """Return the revision the store is at; None when it is empty."""
    tables = inspect(connection).get_table_names()
    if not tables:
        return None
    revision: Any = None
    if "alembic_version" in tables:
        revision = connection.scalar(text("SELECT version_num FROM alembic_version"))
    if revision is None:
        raise StoreError(
            f"store {database.shown_url} holds tables of something else. Name another file or database."
        )
    if revision > HEAD:
        raise StoreError(
            f"store {database.shown_url} was made by a newer program (revision {revision}, this one "
            f"knows {HEAD}). Update tracker, or name another store."
        )
    return str(revision)
