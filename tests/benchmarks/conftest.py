"""What the benchmarks measured, set side by side at the end of the run."""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

import pytest
from pytest_benchmark.fixture import BenchmarkFixture

#: What is divided by what, and what the ratio is meant to be.
RATIOS = (
    ("readable form", "fleet kernel", "meant: at least 8"),
    ("readable form", "fleet kernel, one thread", "meant: at least 8"),
    ("assessment from the store", "fleet kernel on the same arrays", "meant: at most 3"),
    *(
        (f"import, {each}", f"bare parse and sum, {each}", "meant: at most 2.5")
        for each in (
            "10 M rows by meter",
            "50 M rows by meter",
            "50 M rows by hour",
            "100 M rows by meter",
        )
    ),
    (
        "a day of 60,000 meters, 60 min, 12 months held",
        "a day of 60,000 meters, 60 min, 1 months held",
        "meant: 1",
    ),
)

ROOT = Path(__file__).resolve().parents[2]
ONE_PROCESS = Path(__file__).with_name("one_process.py")

Result = TypeVar("Result")


@dataclass(frozen=True)
class Measured:
    """The best of the rounds of one benchmark."""

    seconds: float
    processor_s: float  #: of all processors together; says more on a machine that others use too
    items: int
    of: str  #: what the items are
    peak_mb: float | None = None  #: memory of its process, where it had one of its own


MEASURED = pytest.StashKey[dict[str, Measured]]()


def pytest_configure(config: pytest.Config) -> None:
    """Begin with nothing measured."""
    config.stash[MEASURED] = {}


class Stopwatch:
    """Times one thing, and keeps the best of its rounds for the table at the end."""

    def __init__(self, benchmark: BenchmarkFixture, measured: dict[str, Measured]) -> None:
        self._benchmark = benchmark
        self._measured = measured

    def time(
        self, name: str, function: Callable[[], Result], *, items: int, of: str = "unit-hour"
    ) -> Result:
        """Time a function here, three rounds after one that is not counted."""
        spent_s: list[float] = []

        def round_() -> Result:
            before_s = time.process_time()
            result = function()
            spent_s.append(time.process_time() - before_s)
            return result

        result: Result = self._benchmark.pedantic(round_, rounds=3, warmup_rounds=1)
        if self._benchmark.enabled:
            seconds = self._benchmark.stats.stats.min
            self._measured[name] = Measured(seconds, min(spent_s), items, of)
        return result

    def time_process(
        self,
        name: str,
        words: Callable[[], list[str | Path]],
        *,
        items: int,
        of: str,
        rounds: int = 2,
    ) -> None:
        """Time what a process of its own does with fresh words; it says how long that took."""
        said: list[dict[str, float]] = []

        def round_() -> None:
            done = subprocess.run(
                [sys.executable, ONE_PROCESS, *words()],
                env={**os.environ, "PYTHONPATH": str(ROOT)},
                stdout=subprocess.PIPE,
                check=True,
            )
            said.append(json.loads(done.stdout))

        self._benchmark.pedantic(round_, rounds=rounds)
        if self._benchmark.enabled:
            self._measured[name] = Measured(
                min(each["seconds"] for each in said),
                min(each["processor_s"] for each in said),
                items,
                of,
                max(each["peak_mb"] for each in said),
            )


@pytest.fixture
def stopwatch(benchmark: BenchmarkFixture, request: pytest.FixtureRequest) -> Stopwatch:
    """Times one thing a test."""
    return Stopwatch(benchmark, request.config.stash[MEASURED])


def pytest_terminal_summary(
    terminalreporter: pytest.TerminalReporter, config: pytest.Config
) -> None:
    """Print what each took, and the ratios, measured in this run."""
    measured = config.stash[MEASURED]
    if not measured:
        return
    line = terminalreporter.write_line
    terminalreporter.section("measured in this run")
    line(f"{'':48}{'s':>10}{'processor s':>13}")
    for name, each in measured.items():
        a_piece_ns = f"{1e9 * each.seconds / each.items:,.1f} ns a {each.of}"
        memory = "" if each.peak_mb is None else f"  peak {each.peak_mb:,.0f} MB"
        line(f"{name:48}{each.seconds:10.3f}{each.processor_s:13.3f}{a_piece_ns:>26}{memory}")
    for above, below, meant in RATIOS:
        if above in measured and below in measured:
            a, b = measured[above], measured[below]
            by_time, by_processor = a.seconds / b.seconds, a.processor_s / b.processor_s
            line(f"{above} / {below}: {by_time:.2f}, of processor time {by_processor:.2f}; {meant}")
