"""Tables as CSV files, fit for spreadsheets and for scripts."""

from __future__ import annotations

import contextlib
from pathlib import Path

import numpy as np
import pandas as pd

from tracker.assessment.trace import UnitTrace
from tracker.errors import InputError

#: Enough for float32 figures to come back as they were, and more than the six promised.
SIGNIFICANT = "%.9g"

#: A spreadsheet would take a cell that begins so for a formula.
FORMULA_SIGNS = ("=", "+", "-", "@", "\t", "\r")


def csv_text(table: pd.DataFrame) -> str:
    """Return a table as CSV: times in ISO 8601 UTC, numbers with nine significant digits.

    A text that a spreadsheet would take for a formula gets an apostrophe in front.
    """
    safe = table.copy()
    for name in safe.columns:
        column = safe[name]
        if isinstance(column.dtype, pd.DatetimeTZDtype):
            safe[name] = column.dt.tz_convert("UTC").dt.strftime("%Y-%m-%dT%H:%M:%SZ")
        elif not pd.api.types.is_numeric_dtype(column):
            safe[name] = column.map(_harmless, na_action="ignore")
    return safe.to_csv(index=False, float_format=SIGNIFICANT, lineterminator="\n")


def _harmless(cell: object) -> object:
    if isinstance(cell, str) and cell.startswith(FORMULA_SIGNS):
        return "'" + cell
    return cell


def write_csv(table: pd.DataFrame, path: Path) -> None:
    """Write a table to a file, replacing it only when all is written.

    Raises
    ------
    InputError
        If the file cannot be written.
    """
    unfinished = path.with_name(path.name + ".part")
    try:
        unfinished.write_text(csv_text(table), encoding="utf-8", newline="")
        unfinished.replace(path)
    except OSError as error:
        with contextlib.suppress(OSError):
            unfinished.unlink(missing_ok=True)
        raise InputError(
            f"{path} cannot be written: {error.strerror}. Name a file in a folder of your own."
        ) from error


def trace_table(trace: UnitTrace) -> pd.DataFrame:
    """Return a unit's trace as a table, blank where something is not known."""
    starts = pd.to_datetime(trace.interval_start_s, unit="s", utc=True)
    return pd.DataFrame(
        {
            "interval_start": starts,
            "load_kva": trace.load_kva,
            "air_temp_c": np.round(trace.air_temp_c, 4),
            "top_oil_c": trace.top_oil_c,
            "hot_spot_c": trace.hot_spot_c,
            "aging_factor": trace.aging_factor,
        }
    )
