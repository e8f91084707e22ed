"""One piece of work in a process of its own, so that its memory is its own.

`one_process.py import FOLDER STORE` takes in the loads of a folder, into a new store; `day FOLDER
STORE` into one that is there; `sum FOLDER` lets DuckDB parse every column of the same file and sum
it by meter. Prints seconds and peak memory.
"""

from __future__ import annotations

import json
import re
import sys
import time
from collections.abc import Callable
from pathlib import Path


def importing(folder: Path, store: str) -> Callable[[], None]:
    """Make a store that knows units and connections; return what takes in the readings."""
    from tracker.intake.files import take_file
    from tracker.store.schema import open_database

    database = open_database(store)
    take_file(database, "units", folder / "units.csv")
    take_file(database, "connections", folder / "connections.csv")

    database.close()
    return a_day(folder, store)


def a_day(folder: Path, store: str) -> Callable[[], None]:
    """Open a store; return what takes in the readings."""
    from tracker.intake.files import take_file
    from tracker.store.schema import open_database

    database = open_database(store)

    def work() -> None:
        report = take_file(database, "loads", folder / "loads.csv")
        if report.fates.taken != report.readings:
            raise AssertionError(str(report.refusals[:3]))
        database.close()

    return work


def summing(folder: Path) -> Callable[[], None]:
    """Return what parses all columns and sums the readings, nothing checked and nothing kept."""
    import duckdb

    def work() -> None:
        duckdb.connect().execute(
            """
            SELECT meter_id, max(read_at), sum(kwh)
            FROM read_csv(?, header = true, columns = {
                'meter_id': 'VARCHAR', 'read_at': 'TIMESTAMP', 'kwh': 'DOUBLE'})
            GROUP BY meter_id
            """,
            [str(folder / "loads.csv")],
        ).fetchall()

    return work


def peak_mb() -> float:
    """Return the most memory this process has had [MB].

    Not `ru_maxrss`: that starts with the memory of the process that started this one.
    """
    status = Path("/proc/self/status").read_text(encoding="ascii")
    (kib,) = re.findall(r"VmHWM:\s*(\d+) kB", status)
    return int(kib) * 1024 / 1e6


def main(task: str, folder: str, *store: str) -> None:
    """Do the work, timed once everything is loaded."""
    work = {"import": importing, "day": a_day, "sum": summing}[task](Path(folder), *store)
    began, processor_began = time.perf_counter(), time.process_time()
    work()
    said = {
        "seconds": time.perf_counter() - began,
        "processor_s": time.process_time() - processor_began,
        "peak_mb": peak_mb(),
    }
    sys.stdout.write(json.dumps(said))


if __name__ == "__main__":
    main(*sys.argv[1:])
