"""The command line, called in this process or in one of its own."""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from tracker.cli.main import run as run_tracker


@dataclass(frozen=True)
class Answer:
    """What a command left behind."""

    status: int
    out: str
    err: str

    @property
    def data(self) -> Any:
        """The JSON it printed."""
        return json.loads(self.out)


@pytest.fixture
def tracker(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> Callable[..., Answer]:
    """Run a command line in a folder of its own; the working folder is `tmp_path`."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("TRACKER_STORE", raising=False)

    def call(*arguments: object) -> Answer:
        capsys.readouterr()
        monkeypatch.setattr("sys.argv", ["tracker", *map(str, arguments)])
        with pytest.raises(SystemExit) as stopped:
            run_tracker()
        printed = capsys.readouterr()
        return Answer(int(stopped.value.code or 0), printed.out, printed.err)

    return call


@pytest.fixture
def process(tmp_path: Path) -> Callable[..., Answer]:
    """Run `python -m tracker …` in a process of its own, in `tmp_path`."""

    def call(*arguments: object, **environment: str) -> Answer:
        done = subprocess.run(
            [sys.executable, "-m", "tracker", *map(str, arguments)],
            cwd=tmp_path,
            capture_output=True,
            text=True,
            env={
                "PATH": "",
                "HOME": str(tmp_path),
                "PYTHONPATH": str(Path(__file__).parents[2]),
                **environment,
            },
            check=False,
        )
        return Answer(done.returncode, done.stdout, done.stderr)

    return call
