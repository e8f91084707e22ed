"""`tracker store …`: looks after the store."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

import typer

from tracker.cli.common import DEFAULT_STORE, JsonOption, StoreOption, answer, opened, print_table
from tracker.errors import InputError

app = typer.Typer(
    help="Look after the store: info, check, rules, backup, upgrade.",
    no_args_is_help=True,
    rich_markup_mode=None,
)


@app.command()
def upgrade(store: StoreOption = None, json_: JsonOption = False) -> None:
    """Bring an older store to the revision of this program; back it up first."""
    from tracker.store.engine import Database
    from tracker.store.schema import upgrade as upgrade_store

    database = Database(store or DEFAULT_STORE)
    before, after = upgrade_store(database)
    text = f"{database.shown_url} is at revision {after} already."
    if before != after:
        from tracker.intake.site_load import derive_all

        with database.writing() as connection:
            n_derived = derive_all(connection).n_site_months
        text = (
            f"{database.shown_url}: revision {before or 'none'} → {after}; "
            f"{n_derived:,} site-months of load derived anew. Assess again."
        )
    database.close()
    answer(
        {"before": before, "after": after},
        as_json=json_,
        plain=lambda out: out.print(text, markup=False),
    )


@app.command()
def info(store: StoreOption = None, json_: JsonOption = False) -> None:
    """Say what the store holds."""
    from tracker.store.care import store_info

    with opened(store) as database:
        facts = store_info(database)
    rows = [{"what": name.replace("_", " "), "value": value} for name, value in facts.items()]
    answer(facts, as_json=json_, plain=lambda out: print_table(out, ("what", "value"), rows))


@app.command()
def backup(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="New file to write.")],
    store: StoreOption = None,
    json_: JsonOption = False,
) -> None:
    """Copy the store to a new file, whoever else is using it."""
    from tracker.store.care import back_up

    with opened(store) as database:
        back_up(database, file)
    size_mb = round(file.stat().st_size / 1e6, 1)
    answer(
        {"file": file, "size_mb": size_mb},
        as_json=json_,
        plain=lambda out: out.print(f"{file}: {size_mb:,} MB", markup=False),
    )


@app.command()
def check(store: StoreOption = None, json_: JsonOption = False) -> int:
    """Look for damage: checksums, lengths, dangling rows, loads that are not what readings say."""
    from tracker.intake.care import check_store

    with opened(store) as database:
        problems = check_store(database)

    def plain(out: Any) -> None:
        for problem in problems:
            out.print(problem, markup=False)
        out.print(f"{len(problems)} problems found." if problems else "The store is sound.")

    answer({"sound": not problems, "problems": problems}, as_json=json_, plain=plain)
    return 1 if problems else 0


@app.command()
def rules(
    change: Annotated[
        list[str] | None,
        typer.Option(
            "--set",
            metavar="NAME=VALUE",
            help="Change a rule, 0 switches it off; NAME=default sets it back. May be given several times.",
        ),
    ] = None,
    store: StoreOption = None,
    json_: JsonOption = False,
) -> None:
    """Show the rules of validation and filling, or change them; loads are then derived anew."""
    from dataclasses import asdict

    from tracker.settings import ReadingRules
    from tracker.store.rules import reading_rules

    with opened(store) as database:
        if change:
            from tracker.intake.rules import set_rules

            values = dict(_assignment(text) for text in change)
            with database.writing() as connection:
                set_rules(connection, values)
        with database.reading() as connection:
            in_force = asdict(reading_rules(connection))
    defaults = asdict(ReadingRules())
    rows = [
        {"rule": name, "value": value, "default": defaults[name]}
        for name, value in in_force.items()
    ]
    answer(
        in_force,
        as_json=json_,
        plain=lambda out: print_table(out, ("rule", "value", "default"), rows),
    )


def _assignment(text: str) -> tuple[str, float | None]:
    name, _, value = text.partition("=")
    if value.strip() == "default":
        return name.strip(), None
    try:
        return name.strip(), float(value)
    except ValueError as error:
        raise InputError(
            f"--set {text!r} sets nothing; allowed: NAME=NUMBER, as stuck_h=48, or NAME=default."
        ) from error
