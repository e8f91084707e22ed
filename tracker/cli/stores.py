"""`tracker store …`: looks after the store."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

import typer

from tracker.cli.common import DEFAULT_STORE, JsonOption, StoreOption, answer, opened, print_table

app = typer.Typer(
    help="Look after the store: info, check, backup, upgrade.",
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
    text = (
        f"{database.shown_url} is at revision {after} already."
        if before == after
        else f"{database.shown_url}: revision {before or 'none'} → {after}."
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
