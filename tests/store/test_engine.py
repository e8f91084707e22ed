"""Connections and transactions: all of a step is kept, or nothing."""

from __future__ import annotations

import datetime as dt
import sqlite3

import pytest
from sqlalchemy import insert, select, text

from tracker.errors import StoreError
from tracker.store.engine import Database
from tracker.store.models import IntakeFile, Placement, Site, Unit, UtcDateTime


def add_site(connection, name: str = "S") -> None:
    connection.execute(insert(Site).values(site_id=name))


def test_sqlite_runs_as_every_process_must(utility) -> None:
    """WAL lets the dashboard read while an import writes; foreign keys are off by default."""
    with utility.database.reading() as connection:
        assert connection.scalar(text("PRAGMA journal_mode")) == "wal"
        assert connection.scalar(text("PRAGMA foreign_keys")) == 1


def test_foreign_keys_hold(utility) -> None:
    """A placement of a unit that is not there must be refused."""
    with pytest.raises(StoreError, match="FOREIGN KEY"), utility.database.writing() as connection:
        connection.execute(insert(Placement).values(unit_key=7, site_key=7))


def test_a_failing_transaction_leaves_nothing(utility) -> None:
    """An error half-way through a file must not leave half a file."""

    def half_a_step() -> None:
        with utility.database.writing() as connection:
            add_site(connection)
            raise RuntimeError

    with pytest.raises(RuntimeError):
        half_a_step()
    assert utility.count(Site) == 0


def test_what_is_not_to_be_kept_is_not(utility) -> None:
    """A dry run goes through the whole import, and leaves the store as it was."""
    with utility.database.writing(keep=False) as connection:
        add_site(connection)
        assert connection.scalar(select(Site.site_id)) == "S"
    assert utility.count(Site) == 0
    with utility.database.writing() as connection:
        add_site(connection)
    assert utility.count(Site) == 1


def test_a_reader_sees_one_state(utility) -> None:
    """While an import writes, a page must not show the half of it."""
    other = Database(utility.url)
    with utility.database.reading() as reader:
        assert reader.scalar(select(Site.site_id)) is None
        with other.writing() as writer:
            add_site(writer)
        assert reader.scalar(select(Site.site_id)) is None
    other.close()
    assert utility.count(Site) == 1


def test_a_locked_store_is_explained(utility) -> None:
    """Two imports at once: the second one waits, and then says why it stopped."""
    with sqlite3.connect(utility.folder / "tracker.db", isolation_level=None) as other:
        other.execute("BEGIN IMMEDIATE")
        with utility.database.engine.connect() as connection:
            connection.exec_driver_sql("PRAGMA busy_timeout=1")
        with (
            pytest.raises(StoreError, match="is being written by another process"),
            utility.database.writing() as connection,
        ):
            add_site(connection)
    other.close()


def test_times_without_a_zone_are_refused() -> None:
    """A naive time is local to nobody knows where."""
    kind = UtcDateTime()
    with pytest.raises(ValueError, match="without zone"):
        kind.process_bind_param(dt.datetime(2025, 7, 1), None)


def test_times_come_back_in_utc(utility) -> None:
    """Whatever zone a time came in, the same moment comes back, aware."""
    given = dt.datetime(2025, 7, 1, 2, tzinfo=dt.timezone(dt.timedelta(hours=-5)))
    with utility.database.writing() as connection:
        connection.execute(insert(Unit).values(unit_id="U", rated_kva=25))
        add_site(connection)
        connection.execute(insert(Placement).values(unit_key=1, site_key=1, starts_at=given))
        held = connection.scalar(select(Placement.starts_at))
    assert held == given
    assert held.tzinfo is dt.UTC


def test_fates_that_do_not_add_up_cannot_be_written(utility) -> None:
    """The ledger's promise is held by the database itself."""
    row = {
        "kind": "loads",
        "name": "x.csv",
        "fingerprint": "",
        "imported_at": dt.datetime.now(dt.UTC),
        "options": {},
        "readings": 3,
        "taken": 1,
        "unchanged": 0,
        "corrected": 0,
        "refused": 1,
    }
    with (
        pytest.raises(StoreError, match="fates_add_up"),
        utility.database.writing() as connection,
    ):
        connection.execute(insert(IntakeFile).values(**row))


def test_the_password_of_a_url_is_not_shown() -> None:
    """Error lines end up in tickets."""
    database = Database("sqlite://")
    database.engine.url = database.engine.url.set(
        drivername="postgresql", username="ada", password="secret", host="db"
    )
    assert "secret" not in database.shown_url
    database.close()
