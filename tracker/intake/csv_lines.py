"""The lines of a CSV file, looked at as bytes: whether they are in order, and where records lie.

DuckDB parses; what it cannot split it passes over in silence. So a file is surveyed before it is
parsed, one whose quotes or line ends are not in order is parsed from a tidied copy, and records
are counted and found again here by the same rules.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import BinaryIO

import numpy as np
import xxhash
from numpy.typing import NDArray

#: Bytes looked at side by side. A longer line is always noticed.
BLOCK_BYTES = 1 << 20

#: Longest record that is taken [bytes].
LONGEST_RECORD = 2 * BLOCK_BYTES

BOM = b"\xef\xbb\xbf"
_NEWLINE, _RETURN, _QUOTE = b'\n\r"'


@dataclass(frozen=True, slots=True)
class Survey:
    """What the bytes of a file are like."""

    checksum: str  #: of all of them
    n_line: int
    one_line_end: bool  #: all lines end alike, in LF or in CR LF
    quoted_rows: bool  #: a quote stands behind the headings
    quotes_in_order: bool  #: a quote opens and closes a field, or is doubled in one; within a line
    lines_short: bool  #: no line is longer than `LONGEST_RECORD`


def survey(file: BinaryIO, separator: str, n_before: int) -> Survey:
    """Look at every byte of a file once; so many lines stand up to the headings."""
    digest = xxhash.xxh3_128()
    room = bytearray(BLOCK_BYTES)
    n_newline = n_return = n_pair = 0
    quoted_rows, quotes_in_order, lines_short = False, True, True
    tail, last = b"", b"\n"
    first = True
    while n := _filled(file, room):
        block = memoryview(room)[:n]
        digest.update(block)
        values = np.frombuffer(block, dtype=np.uint8)
        n_here = int(np.count_nonzero(values == _NEWLINE))
        quoted_rows = quoted_rows or _has_quote(room, n, values, n_before - n_newline)
        n_newline += n_here
        lines_short &= n_here > 0 or n < BLOCK_BYTES
        if room.find(b"\r", 0, n) >= 0 or last == b"\r":
            n_return += int(np.count_nonzero(values == _RETURN))
            n_pair += room.count(b"\r\n", 0, n) + (last == b"\r" and room[0] == _NEWLINE)
        if quotes_in_order and lines_short:
            end = room.rfind(b"\n", 0, n) + 1
            if tail.find(b'"') >= 0 or room.find(b'"', 0, n) >= 0:
                lines = tail + room[:end]
                quotes_in_order = _quotes_in_order(
                    lines.removeprefix(BOM) if first else lines, separator
                )
            tail = bytes(room[end:n]) if end else tail + bytes(room[:n])
            first &= not end
        last = bytes(room[n - 1 : n])
    if quotes_in_order and b'"' in tail:
        quotes_in_order = _quotes_in_order(tail.removeprefix(BOM) if first else tail, separator)
    return Survey(
        digest.hexdigest(),
        n_newline + (last != b"\n"),
        n_return == 0 or n_return == n_pair == n_newline,
        quoted_rows,
        quotes_in_order,
        lines_short,
    )


def _filled(file: BinaryIO, room: bytearray) -> int:
    """Fill the room, but at the end of the file; return the number of bytes."""
    n = 0
    view = memoryview(room)
    while n < len(room):
        more = file.readinto(view[n:])  # type: ignore[attr-defined]
        if not more:
            break
        n += more
    return n


def _has_quote(room: bytearray, n: int, values: NDArray[np.uint8], n_before: int) -> bool:
    """Say whether a quote stands in a block behind so many line ends."""
    if room.find(b'"', 0, n) < 0:
        return False
    if n_before <= 0:
        return True
    newlines = np.flatnonzero(values == _NEWLINE)
    return len(newlines) >= n_before and room.find(b'"', int(newlines[n_before - 1]), n) >= 0


def _quotes_in_order(lines: bytes, separator: str) -> bool:
    """Say whether quotes in whole lines open and close fields, or stand doubled in quoted ones."""
    values = np.frombuffer(b"\n" + lines + b"\n", dtype=np.uint8)
    marks = np.flatnonzero((values == _QUOTE) | (values == _NEWLINE))
    of_quotes = np.flatnonzero(values[marks] == _QUOTE)
    quotes = marks[of_quotes]
    if len(quotes) % 2:
        return False
    before, after = values[quotes[::2] - 1], values[quotes[1::2] + 1]
    sign = ord(separator)
    return bool(
        (of_quotes[1::2] == of_quotes[::2] + 1).all()  # no line ends between the two
        and ((before == sign) | (before == _NEWLINE) | (before == _QUOTE)).all()
        and ((after == sign) | (after == _NEWLINE) | (after == _RETURN) | (after == _QUOTE)).all()
    )


@dataclass(frozen=True, slots=True)
class Records:
    """Some records of a file, in order; arrays of shape (n_record,). Blank lines are none."""

    data: bytes
    start: NDArray[np.int64]  #: first byte of each in `data`
    end: NDArray[np.int64]  #: the byte after its last, line end included
    line: NDArray[np.int64]  #: the first line of each, from 1
    n_field: NDArray[np.int64]
    is_text: NDArray[np.bool_]  #: whether it is valid UTF-8

    def text(self, place: int) -> str:
        """Return a record as it stands."""
        raw = self.data[self.start[place] : self.end[place]]
        return raw.decode("utf-8", errors="replace").rstrip("\r\n")

    def are_readable(self, n_heading: int, separator: str) -> NDArray[np.bool_]:
        """Say which records the parser takes: text, a field a heading; more only if all are blank."""
        readable: NDArray[np.bool_] = (self.n_field == n_heading) & self.is_text
        for place in np.flatnonzero((self.n_field > n_heading) & self.is_text).tolist():
            readable[place] = self.n_field[place] - n_heading <= _n_blank_at_end(
                self.text(place), separator
            )
        return readable

    def n_line(self, place: int) -> int:
        """Return the number of lines that a record takes."""
        return max(1, self.data.count(b"\n", self.start[place], self.end[place]))


def _n_blank_at_end(text: str, separator: str) -> int:
    """Return how many blank fields stand at the end of a record."""
    n, end = 0, len(text)
    while True:
        if text.endswith(separator, 0, end):
            end -= 1
        elif text.endswith(separator + '""', 0, end):
            end -= 3
        else:
            return n
        n += 1


def records(file: BinaryIO, n_before: int, separator: str) -> Iterator[Records]:
    """Yield the records after so many lines.

    The file's quotes and line ends are in order, so that a line end outside quotes ends a record.
    """
    for _ in range(n_before):
        file.readline()
    line, tail = n_before + 1, b""
    while block := file.read(BLOCK_BYTES):
        data = tail + block
        found, end, n_line = _split(data, line, separator)
        tail = data[end:]
        line += n_line
        if len(found.start):
            yield found
    if tail:
        found, _, _ = _split(tail + b"\n", line, separator)
        if len(found.start):
            yield found


def _split(data: bytes, line: int, separator: str) -> tuple[Records, int, int]:
    """Return the whole records of some bytes, the byte after the last, and how many lines they are."""
    values = np.frombuffer(data, dtype=np.uint8)
    is_newline, is_separator = values == _NEWLINE, values == ord(separator)
    newlines = np.flatnonzero(is_newline)
    if b'"' in data:
        outside = ~np.logical_xor.accumulate(values == _QUOTE)
        is_newline &= outside
        is_separator &= outside
    last = np.flatnonzero(is_newline)
    start, end = np.append(0, last[:-1] + 1)[: len(last)], last + 1
    before = np.cumsum(is_separator)[last] if len(last) else np.zeros(0, dtype=np.int64)
    n_field = np.diff(before, prepend=0) + 1
    lines = line + np.searchsorted(newlines, start)
    blank = (start == last) | ((start + 1 == last) & (values[start] == _RETURN))
    start, end, lines, n_field = start[~blank], end[~blank], lines[~blank], n_field[~blank]
    done = int(last[-1]) + 1 if len(last) else 0
    n_line = int(np.searchsorted(newlines, done))
    return Records(data, start, end, lines, n_field, _are_text(data, start, end)), done, n_line


def _are_text(data: bytes, start: NDArray[np.int64], end: NDArray[np.int64]) -> NDArray[np.bool_]:
    if _is_utf_8(data[: int(end[-1])] if len(end) else b""):
        return np.ones(len(start), dtype=np.bool_)
    spans = zip(start.tolist(), end.tolist(), strict=True)
    return np.array([_is_utf_8(data[first:last]) for first, last in spans], dtype=np.bool_)


def _is_utf_8(data: bytes) -> bool:
    try:
        data.decode("utf-8")
    except UnicodeDecodeError:
        return False
    return True
