"""Tidied copies of CSV files whose line ends, encoding or quotes are not in order.

A copy has the lines of the file at the same numbers, in UTF-8 and with LF ends. Records that cannot
be read as what they claim to be are left out of it (their lines are blank) and noted beside it.
"""

from __future__ import annotations

import codecs
import csv
import io
import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO, TextIO

from tracker.intake.csv_lines import BLOCK_BYTES, LONGEST_RECORD

#: What stands where bytes are no text in the file's encoding; no text in UTF-8 either.
UNREADABLE = "\udcff"


def _mark(error: UnicodeError) -> tuple[str, int]:
    if not isinstance(error, UnicodeDecodeError):
        raise error
    return UNREADABLE, error.end


codecs.register_error("tracker.unreadable", _mark)


def text_of(file: BinaryIO, encoding: str) -> TextIO:
    """Read bytes as text; every kind of line end becomes LF."""
    return io.TextIOWrapper(file, encoding=encoding, errors="tracker.unreadable", newline=None)


def copy_with_one_line_end(file: BinaryIO, encoding: str, copy: Path) -> None:
    """Write a copy in UTF-8 whose lines all end in LF; unreadable bytes stay unreadable."""
    with text_of(file, encoding) as text, copy.open("wb") as out:
        while block := text.read(BLOCK_BYTES):
            out.write(block.encode("utf-8", errors="surrogateescape"))


# --- Quotes ---------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Aside:
    """A record that was left out of the copy."""

    line: int
    code: str
    reason: str


BAD_QUOTES = (
    "row.quotes",
    'a quoted field is not closed, or text stands behind its closing quote (")',
)
TOO_LONG = ("row.too_long", "the row is longer than 2 MB; one record a line is expected")


def lines_of(text: TextIO) -> Iterator[tuple[str, bool]]:
    """Yield (line without its end, whether it is whole); what is too long is cut."""
    while line := text.readline(LONGEST_RECORD + 1):
        whole = line.endswith("\n") or len(line) <= LONGEST_RECORD
        if not whole:
            while (rest := text.readline(LONGEST_RECORD)) and not rest.endswith("\n"):
                pass
        yield line.rstrip("\n"), whole


def copy_with_quotes_in_order(
    text: TextIO, separator: str, n_before: int, n_field: int, copy: Path, aside: Path
) -> None:
    """Write a copy in which every quote opens and closes a field, or is doubled in one.

    A record whose quotes cannot be meant is left out for its first line alone; the next begins on
    the line after it, so that one stray quote does not swallow what follows.

    Parameters
    ----------
    n_before : int
        Lines up to the headings; blank in the copy.
    n_field : int
        Number of headings. A quoted line break is believed only in a record of so many fields.
    aside : Path
        Where the records left out are noted, one a line: see `read_aside`.
    """
    reader = _Lines(text)
    in_order = _in_order(separator)
    with (
        copy.open("w", encoding="utf-8", errors="surrogateescape", newline="\n") as out,
        aside.open("w", encoding="utf-8", newline="\n") as notes,
    ):
        writer = csv.writer(out, delimiter=separator, lineterminator="\n")
        for number in range(n_before):
            if reader.line(number) is None:
                return
            out.write("\n")
            reader.forget(number + 1)
        number = n_before
        while (line := reader.line(number)) is not None:
            if line is _Lines.TOO_LONG:
                notes.write(f"{number + 1} {TOO_LONG[0]}\n")
                out.write("\n")
                number += 1
            elif '"' not in line or in_order.fullmatch(line):
                out.write(line + "\n")
                number += 1
            else:
                fields, n_line = _quoted(reader, number, separator, n_field)
                if fields is None:
                    notes.write(f"{number + 1} {BAD_QUOTES[0]}\n")
                    out.write("\n")
                else:
                    writer.writerow(fields)
                number += n_line
            reader.forget(number)


def _in_order(separator: str) -> re.Pattern[str]:
    """Return the form of a line whose quotes are in order."""
    sign = re.escape(separator)
    field = rf'(?:"[^"]*+(?:""[^"]*+)*+"|[^"{sign}]*+)'
    return re.compile(rf"{field}(?:{sign}{field})*+")


def read_aside(aside: Path) -> Iterator[Aside]:
    """Yield the records that were left out, in order."""
    reasons = dict([BAD_QUOTES, TOO_LONG])
    with aside.open(encoding="utf-8") as notes:
        for note in notes:
            line, code = note.split()
            yield Aside(int(line), code, reasons[code])


class _Lines:
    """Lines by number, from 0; those that were forgotten are gone."""

    TOO_LONG = "\0too long"

    def __init__(self, text: TextIO) -> None:
        self._source = lines_of(text)
        self._held: list[str] = []
        self._first = 0

    def line(self, number: int) -> str | None:
        """Return a line, `TOO_LONG` itself, or None behind the last."""
        while number >= self._first + len(self._held):
            line, whole = next(self._source, (None, True))
            if line is None:
                return None
            self._held.append(line if whole else self.TOO_LONG)
        return self._held[number - self._first]

    def forget(self, number: int) -> None:
        """Forget the lines before this one."""
        n = min(number - self._first, len(self._held))
        if n == len(self._held):
            self._held.clear()
        else:
            del self._held[:n]
        self._first += n


class _Record:
    """A record with quotes, read field by field from the line it begins on."""

    def __init__(self, lines: _Lines, number: int, separator: str) -> None:
        self._lines = lines
        self._number = number
        self._separator = separator
        self._line = lines.line(number) or ""
        self._at = 0
        self._n_byte = len(self._line)
        self.n_line = 1

    def fields(self) -> list[str] | None:
        """Return the fields; None when the quotes cannot be meant."""
        fields: list[str] = []
        more = True
        while more:
            behind_spaces = self._behind_spaces(self._at)
            if self._line.startswith('"', behind_spaces):
                self._at = behind_spaces + 1
                field = self._quoted()
                if field is None:
                    return None
                fields.append(field)
                self._at = self._behind_spaces(self._at)
                more = self._line.startswith(self._separator, self._at)
                if not more and self._at < len(self._line):
                    return None
            else:
                end = self._line.find(self._separator, self._at)
                more = end >= 0
                end = end if more else len(self._line)
                fields.append(self._line[self._at : end])
                self._at = end
            self._at += 1
        return fields

    def _behind_spaces(self, at: int) -> int:
        while self._line.startswith(" ", at):
            at += 1
        return at

    def _quoted(self) -> str | None:
        """Return what stands up to the closing quote; None when there is none."""
        held = ""
        while True:
            end = self._line.find('"', self._at)
            if end < 0:
                held += self._line[self._at :] + "\n"
                if not self._next_line():
                    return None
            elif self._line.startswith('""', end):
                held += self._line[self._at : end + 1]
                self._at = end + 2
            else:
                held += self._line[self._at : end]
                self._at = end + 1
                return held

    def _next_line(self) -> bool:
        """Go on to the next line; False when there is none that may belong to the record."""
        line = self._lines.line(self._number + self.n_line)
        if line is None or line is _Lines.TOO_LONG:
            return False
        self._n_byte += len(line) + 1
        self._line, self._at = line, 0
        self.n_line += 1
        return self._n_byte <= LONGEST_RECORD


def _quoted(
    lines: _Lines, number: int, separator: str, n_field: int
) -> tuple[list[str] | None, int]:
    """Return the fields of the record that begins on a line, or None, and how many lines it takes."""
    record = _Record(lines, number, separator)
    fields = record.fields()
    if fields is None or (record.n_line > 1 and len(fields) != n_field):
        return None, 1
    return fields, record.n_line
