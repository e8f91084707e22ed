"""Packed blocks: one series or site and one month of values at a fixed step.

Layout, little-endian::

    version    uint8     1
    reserved   uint8     0
    step_min   uint16    minutes from value to value, a divisor of 60
    count      uint32    number of values: the whole month, from its first minute in UTC
    checksum   uint64    XXH3-64 of all that follows
    values     float32   x count, NaN where nothing is held
    flags      uint8     x count, see `Quality`; 0 where nothing is held

Many blocks of one month and step are packed and unpacked side by side, so that the cost is a
copy of memory and not a loop over values.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from enum import IntFlag
from functools import cache
from typing import Any

import numpy as np
import xxhash
from numpy.typing import NDArray

from tracker.errors import StoreError

VERSION = 1
HEADER = np.dtype(
    [
        ("version", "<u1"),
        ("reserved", "<u1"),
        ("step_min", "<u2"),
        ("count", "<u4"),
        ("checksum", "<u8"),
    ]
)
HEADER_BYTES = HEADER.itemsize
BYTES_A_VALUE = 5

Float32Array = NDArray[np.float32]
FlagArray = NDArray[np.uint8]


class Quality(IntFlag):
    """What is known about a value beyond its size; a byte beside each."""

    HELD = 1  #: a value is there
    ESTIMATED = 2  #: the utility marked the reading as estimated
    SCALED = 4  #: site load raised for meters that are missing
    FILLED = 8  #: a short gap, filled by a straight line
    LIKE_DAYS = 16  #: a longer gap, filled by the mean of like days
    DOUBTFUL = 32  #: a rule of validation doubts the reading
    SPREAD = 64  #: energy of a month, spread over its hours


def month_of(seconds: int) -> int:
    """Return the month, counted from January 1970, that a moment [s since 1970, UTC] lies in.

    >>> month_of(0), month_of(31 * 86_400)
    (0, 1)
    """
    return int(np.datetime64(seconds, "s").astype("datetime64[M]").astype(np.int64))


@cache
def month_start_s(month: int) -> int:
    """Return the first moment of a month [s since 1970, UTC].

    >>> month_start_s(1)
    2678400
    """
    return int(np.datetime64(month, "M").astype("datetime64[s]").astype(np.int64))


@cache
def values_a_month(month: int, step_min: int) -> int:
    """Return how many values a block of this month and step holds.

    >>> values_a_month(1, 60)  # February 1970
    672
    """
    return (month_start_s(month + 1) - month_start_s(month)) // (60 * step_min)


def pack(values: Float32Array, flags: FlagArray, step_min: int) -> list[bytes]:
    """Pack blocks of one month and step.

    Parameters
    ----------
    values : float32, shape (n_block, n_value)
    flags : uint8, shape (n_block, n_value)
    step_min : int
        Minutes from value to value.

    Returns
    -------
    payloads : list of bytes, n_block long
    """
    n_block, n_value = values.shape
    room = np.empty((n_block, HEADER_BYTES + BYTES_A_VALUE * n_value), dtype=np.uint8)
    split = HEADER_BYTES + 4 * n_value
    room[:, HEADER_BYTES:split] = np.ascontiguousarray(values, dtype="<f4").view(np.uint8)
    room[:, split:] = flags
    header = np.zeros(n_block, dtype=HEADER)
    header["version"], header["step_min"], header["count"] = VERSION, step_min, n_value
    header["checksum"] = [xxhash.xxh3_64_intdigest(row[HEADER_BYTES:].data) for row in room]
    room[:, :HEADER_BYTES] = header.view(np.uint8).reshape(n_block, HEADER_BYTES)
    return [row.tobytes() for row in room]


def step_of(payload: bytes) -> int:
    """Return the step [min] of a block without unpacking it."""
    return int.from_bytes(payload[2:4], "little")


def n_held(payload: bytes) -> int:
    """Return how many values a block holds, without unpacking it.

    The flags stand last, a byte each, 0 where nothing is held.
    """
    n_value = int.from_bytes(payload[4:8], "little")
    return n_value - payload.count(b"\0", len(payload) - n_value)


def unpack(payloads: Sequence[bytes]) -> tuple[Float32Array, FlagArray]:
    """Unpack blocks of equal length.

    Returns
    -------
    values : float32, shape (n_block, n_value)
    flags : uint8, shape (n_block, n_value)
        Both are views of the payloads' own memory: copy before writing.

    Raises
    ------
    StoreError
        If a block is of another version, cut, or damaged.
    """
    room = np.frombuffer(b"".join(payloads), dtype=np.uint8)
    width = len(payloads[0])
    if width < HEADER_BYTES or room.size != width * len(payloads):
        raise StoreError(_DAMAGED.format("blocks of unequal length stand where equal ones should"))
    room = room.reshape(len(payloads), width)
    header = room[:, :HEADER_BYTES].copy().view(HEADER)[:, 0]
    n_value = (width - HEADER_BYTES) // BYTES_A_VALUE
    if (header["version"] != VERSION).any():
        raise StoreError(_DAMAGED.format(f"block version {header['version'].max()} is unknown"))
    if (header["count"] != n_value).any() or width != HEADER_BYTES + BYTES_A_VALUE * n_value:
        raise StoreError(_DAMAGED.format("a block's length is not what its header says"))
    sums = [xxhash.xxh3_64_intdigest(row[HEADER_BYTES:].data) for row in room]
    if (header["checksum"] != np.array(sums, dtype=np.uint64)).any():
        raise StoreError(_DAMAGED.format("a block's checksum does not hold"))
    split = HEADER_BYTES + 4 * n_value
    return room[:, HEADER_BYTES:split].view("<f4"), room[:, split:]


@dataclass(frozen=True, slots=True)
class Blocks:
    """Packed blocks as a query gives them; arrays of shape (n_block,)."""

    key: NDArray[np.int64]  #: of the series or site
    month: NDArray[np.int64]
    payload: Sequence[bytes]
    step_min: NDArray[np.int64]
    headers: bytes  #: all headers, checksums included, one after the other

    @classmethod
    def of(cls, rows: Sequence[Any]) -> Blocks:
        """Take rows of (key, month, payload)."""
        key, month, payload = zip(*rows, strict=True) if rows else ((), (), ())
        headers = b"".join([each[:HEADER_BYTES] for each in payload])
        if len(headers) != HEADER_BYTES * len(payload):
            raise StoreError(_DAMAGED.format("a block is shorter than its header"))
        return cls(
            np.array(key, dtype=np.int64),
            np.array(month, dtype=np.int64),
            payload,
            np.frombuffer(headers, dtype=HEADER)["step_min"].astype(np.int64),
            headers,
        )

    def __len__(self) -> int:
        return len(self.payload)

    def of_equal_length(self) -> Iterator[tuple[int, int, NDArray[np.intp]]]:
        """Yield (month, step, places of the blocks that have both), by month and step."""
        for month in np.unique(self.month).tolist():
            of_month = np.flatnonzero(self.month == month)
            steps = self.step_min[of_month]
            for step in np.unique(steps).tolist():
                yield month, step, of_month[steps == step]


_DAMAGED = "the store is damaged: {}. `tracker store check` names the place; restore a backup."
