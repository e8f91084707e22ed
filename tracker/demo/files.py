"""How the invented utility writes its CSV files: plain, UTF-8, a heading line, stamps in UTC.

A table of readings is written without a Python loop over its rows: each row is a fixed-width record
whose unused bytes are NUL, and the NUL bytes are dropped when the block is joined.
"""

from __future__ import annotations

import csv
import gzip
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

LOADS_HEADING = b"meter_id,read_at,kwh\n"
WEATHER_HEADING = b"station_id,read_at,air_temp_c\n"

_MILLI = np.array([b".%03d\n" % i for i in range(1000)])
_TENTH = np.array([b".%d\n" % i for i in range(10)])
_WHOLE = np.array([b"%d" % i for i in range(10_000)])


def reading_rows(
    names: Sequence[str],
    stamps_utc: NDArray[np.datetime64],
    readings: NDArray[np.float64] | NDArray[np.float32],
    *,
    decimals: int,
) -> bytes:
    """Return CSV rows `name,stamp,value`, name by name; NaN readings have no row.

    Parameters
    ----------
    names : sequence of str, length n_name
        Meter or station ids, ASCII.
    stamps_utc : array of datetime64, shape (n_step,)
        Interval starts, UTC.
    readings : array, shape (n_name, n_step)
        Values, between -9999 and 9999; NaN where there is no reading.
    decimals : int
        Digits after the point, 1 or 3.

    Examples
    --------
    >>> stamps = np.array(["2025-07-01T05:00", "2025-07-01T06:00", "2025-07-01T07:00"], "M8[m]")
    >>> kwh = np.array([[1.25, np.nan, -0.0301]])
    >>> print(reading_rows(["M-0000007"], stamps, kwh, decimals=3).decode())
    M-0000007,2025-07-01T05:00:00Z,1.250
    M-0000007,2025-07-01T07:00:00Z,-0.030
    """
    fractions = {1: _TENTH, 3: _MILLI}[decimals]
    stamp_texts = np.char.add(
        np.char.add(b",", np.datetime_as_string(stamps_utc, unit="s").astype("S19")), b"Z,"
    )
    name_texts = np.array([name.encode("ascii") for name in names])
    row_type = [
        ("name", name_texts.dtype),
        ("stamp", stamp_texts.dtype),
        ("sign", "S1"),
        ("whole", _WHOLE.dtype),
        ("fraction", fractions.dtype),
    ]
    present = ~np.isnan(readings)
    scaled = np.rint(np.where(present, readings, 0.0) * 10**decimals).astype(np.int32)
    whole, fraction = np.divmod(np.abs(scaled), np.int32(10**decimals))
    rows = np.empty(readings.shape, dtype=row_type)
    rows["name"] = name_texts[:, None]
    rows["stamp"] = stamp_texts
    rows["sign"] = np.array([b"", b"-"])[(scaled < 0).astype(np.intp)]
    rows["whole"] = _WHOLE[whole]
    rows["fraction"] = fractions[fraction]
    if not present.all():
        rows = rows[present]
    return rows.tobytes().translate(None, b"\0")


def gzipped(rows: bytes) -> bytes:
    """Return one gzip member, the same for the same rows; members may be joined end to end."""
    return gzip.compress(rows, compresslevel=1, mtime=0)


def write_table(path: Path, headings: Sequence[str], rows: Iterable[Sequence[object]]) -> None:
    """Write a small table; None becomes an empty cell."""
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(headings)
        writer.writerows(rows)
