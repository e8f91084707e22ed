"""The commands, run as people run them: each a process of its own, in a folder of its own."""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture(scope="session")
def tracker_in() -> Callable[..., str]:
    """A function that runs `tracker …` in a folder and returns what it printed."""

    def run(folder: Path, *words: str | Path) -> str:
        path = os.pathsep.join([str(ROOT), os.environ.get("PYTHONPATH", "")])
        done = subprocess.run(
            [sys.executable, "-m", "tracker", *map(str, words)],
            cwd=folder,
            env={**os.environ, "PYTHONPATH": path},
            capture_output=True,
            text=True,
            check=False,
        )
        assert done.returncode == 0, done.stderr
        assert done.stderr == ""
        return done.stdout

    return run
