"""Help: every command has it, it is quick, and the README knows every option."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
import typer.main

from tracker.cli.main import app

README = Path(__file__).parents[2] / "README.md"
HEAVY = ("dash", "numba", "pandas", "plotly", "scipy", "duckdb", "alembic")


def commands(group=None, path=()) -> Iterator[tuple[tuple[str, ...], object]]:
    """Yield (words, command) of every command and group."""
    group = group or typer.main.get_command(app)
    for name, command in group.commands.items():
        yield (*path, name), command
        if hasattr(command, "commands"):
            yield from commands(command, (*path, name))


ALL = dict(commands())

#: Contract, section 3: `--json` wherever there is an answer; a server gives none.
WITHOUT_JSON = {("dashboard",)}


@pytest.mark.parametrize("words", [(), *ALL], ids=" ".join)
def test_every_command_has_help(tracker, words) -> None:
    """With a sentence on what it does, and exit status 0."""
    answer = tracker(*words, "--help")
    assert answer.status == 0
    assert "Usage:" in answer.out
    assert answer.err == ""


def test_every_command_and_option_says_what_it_is() -> None:
    """An option without a word is a riddle."""
    silent = [
        f"{' '.join(words)} {option.opts[0]}"
        for words, command in ALL.items()
        for option in command.params
        if hasattr(option, "help") and not option.help
    ]
    assert silent == []
    assert [words for words, command in ALL.items() if not command.help] == []


def test_every_command_answers_in_json() -> None:
    """Contract, section 3."""
    missing = {
        words
        for words, command in ALL.items()
        if not hasattr(command, "commands")
        and not any("--json" in option.opts for option in command.params)
    }
    assert missing == WITHOUT_JSON


def test_the_commands_of_the_contract_are_there() -> None:
    """By the names people type."""
    wanted = {
        *(("import", kind) for kind in ("units", "connections", "loads", "weather")),
        *(("store", verb) for verb in ("upgrade", "info", "check", "backup")),
        *((verb,) for verb in ("demo", "assess", "rank", "trace", "export", "dashboard", "verify")),
    }
    assert wanted <= set(ALL)


def test_help_is_quick() -> None:
    """Counted in modules, not in seconds: none of the heavy ones is loaded for help."""
    code = (
        "import sys\n"
        "from tracker.cli.main import run\n"
        f"for words in {[(), *ALL]!r}:\n"
        "    sys.argv = ['tracker', *words, '--help']\n"
        "    try:\n"
        "        run()\n"
        "    except SystemExit as stopped:\n"
        "        assert not stopped.code, words\n"
        f"print('loaded:', sorted(set({HEAVY!r}) & set(sys.modules)))\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "loaded: []"


def test_the_readme_names_every_command_and_option() -> None:
    """What is not written down is not found."""
    text = README.read_text(encoding="utf-8")
    missing = [" ".join(words) for words in ALL if f"tracker {' '.join(words)}" not in text]
    options = {
        spelled
        for command in ALL.values()
        for option in command.params
        for spelled in option.opts
        if spelled.startswith("--") and spelled != "--help"
    }
    missing += sorted(spelled for spelled in options if spelled not in text)
    assert missing == []
