"""The store's revision, and that models and migrations say the same."""

from __future__ import annotations

import sqlite3
from pathlib import Path

import pytest
from alembic.autogenerate import compare_metadata
from alembic.config import Config
from alembic.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import CheckConstraint, inspect

from tracker.cli.main import run
from tracker.errors import InputError, StoreError
from tracker.store.engine import Database
from tracker.store.models import Base
from tracker.store.schema import HEAD, migrations_folder, open_database, upgrade


def set_revision(path: Path, revision: str) -> None:
    with sqlite3.connect(path) as connection:
        connection.execute("UPDATE alembic_version SET version_num = ?", [revision])
    connection.close()


def test_models_and_migrations_do_not_drift(utility) -> None:
    """A column in the models that no migration makes fails only on other people's stores."""
    with utility.database.reading() as connection:
        context = MigrationContext.configure(connection, opts={"compare_type": True})
        assert compare_metadata(context, Base.metadata) == []


def test_check_constraints_do_not_drift(utility) -> None:
    """Alembic compares no check constraints, and they guard the four fates adding up."""
    with utility.database.reading() as connection:
        made = {
            (table, each["name"], each["sqltext"].replace("\n", " "))
            for table in Base.metadata.tables
            for each in inspect(connection).get_check_constraints(table)
        }
    wanted = {
        (table.name, str(each.name), str(each.sqltext))
        for table in Base.metadata.tables.values()
        for each in table.constraints
        if isinstance(each, CheckConstraint)
    }
    assert made == wanted


def test_every_constraint_has_a_name(utility) -> None:
    """Alembic cannot move a nameless constraint of a SQLite table."""
    with utility.database.reading() as connection:
        look = inspect(connection)
        names = [
            (table, kind, each["name"])
            for table in Base.metadata.tables
            for kind, found in (
                ("primary key", [look.get_pk_constraint(table)]),
                ("unique", look.get_unique_constraints(table)),
                ("foreign key", look.get_foreign_keys(table)),
                ("check", look.get_check_constraints(table)),
                ("index", look.get_indexes(table)),
            )
            for each in found
        ]
    assert len(names) > 30
    assert [each for each in names if not each[2]] == []


def test_head_is_the_newest_migration() -> None:
    """`HEAD` is written down so that opening a store does not load Alembic; it must not go stale."""
    config = Config()
    config.set_main_option("script_location", str(migrations_folder()))
    assert ScriptDirectory.from_config(config).get_heads() == [HEAD]


def test_a_new_store_is_made_on_the_fly(tmp_path) -> None:
    """Nobody should have to make a store before the first import."""
    path = tmp_path / "new.db"
    open_database(f"sqlite:///{path}").close()
    assert path.is_file()
    database = open_database(f"sqlite:///{path}")
    assert upgrade(database) == (HEAD, HEAD)
    database.close()


def test_a_newer_store_is_refused(utility) -> None:
    """An old program must not write what a newer one cannot understand."""
    set_revision(utility.folder / "tracker.db", "9999")
    with pytest.raises(
        StoreError, match=rf"newer program \(revision 9999, this one knows {HEAD}\)"
    ):
        open_database(utility.url)
    with pytest.raises(StoreError, match="newer program"):
        upgrade(Database(utility.url))


def test_an_older_store_is_refused_until_it_is_upgraded(utility) -> None:
    """Opening must not change a store behind anybody's back."""
    set_revision(utility.folder / "tracker.db", "0000")
    with pytest.raises(StoreError, match=r"is at revision 0000.*`tracker store upgrade`"):
        open_database(utility.url)


def test_upgrade_makes_an_empty_store(tmp_path) -> None:
    """`store upgrade` on an empty file brings it to the newest revision."""
    database = Database(f"sqlite:///{tmp_path / 'empty.db'}")
    assert upgrade(database) == (None, HEAD)
    database.close()
    open_database(database.url).close()


def test_a_store_with_a_percent_sign_in_its_path_can_be_made(tmp_path) -> None:
    """Alembic reads its settings with interpolation, where % is special."""
    folder = tmp_path / "50% load"
    folder.mkdir()
    open_database(f"sqlite:///{folder / 'tracker.db'}").close()


def test_a_database_of_something_else_is_refused(tmp_path) -> None:
    """Nothing may be written into another program's database."""
    path = tmp_path / "other.db"
    with sqlite3.connect(path) as connection:
        connection.execute("CREATE TABLE recipe (name TEXT)")
    connection.close()
    before = path.read_bytes()
    with pytest.raises(StoreError, match="holds tables of something else"):
        open_database(f"sqlite:///{path}")
    # Journal mode aside, the file is as it was.
    with sqlite3.connect(path) as connection:
        tables = connection.execute("SELECT name FROM sqlite_master").fetchall()
    connection.close()
    assert tables == [("recipe",)]
    assert len(path.read_bytes()) == len(before)


def test_a_file_that_is_no_database_is_refused(tmp_path) -> None:
    """A CSV file named as the store must come back unharmed, with a line that says so."""
    path = tmp_path / "loads.csv"
    path.write_text("meter_id,read_at,kwh\n" * 100)
    with pytest.raises(StoreError, match="is not a database file"):
        open_database(f"sqlite:///{path}")
    assert path.read_text() == "meter_id,read_at,kwh\n" * 100


@pytest.mark.parametrize(
    "url", ["tracker.db", "sqlite:////nowhere/at/all/tracker.db", "nosuch://x", ""]
)
def test_a_url_that_cannot_be_opened_is_explained(url) -> None:
    """The most common slip is a path in place of a URL."""
    with pytest.raises(InputError):
        open_database(url)


def test_store_upgrade_command_refuses_a_newer_store(utility, monkeypatch, capsys) -> None:
    """The command that changes revisions must not be the one that breaks a newer store."""
    set_revision(utility.folder / "tracker.db", "9999")
    monkeypatch.setattr("sys.argv", ["tracker", "store", "upgrade", "--store", utility.url])
    with pytest.raises(SystemExit) as stopped:
        run()
    assert stopped.value.code == 2
    assert "newer program" in capsys.readouterr().err
