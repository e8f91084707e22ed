"""CSV files: comma, semicolon, tab or bar; quoted or not; plain or packed; in any encoding."""

from __future__ import annotations

import csv
import heapq
import re
import threading
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO, TextIO

import numpy as np

from tracker.errors import IntakeError
from tracker.intake.csv_lines import LONGEST_RECORD, Records, Survey, records, survey
from tracker.intake.csv_tidy import (
    UNREADABLE,
    copy_with_one_line_end,
    copy_with_quotes_in_order,
    lines_of,
    read_aside,
    text_of,
)
from tracker.intake.guide import ColumnGuide
from tracker.intake.report import KEPT_TEXT, Finding, Findings, Refusal
from tracker.intake.rows import ROWS_A_BATCH, Source
from tracker.intake.unpack import Packing, checksum_of, opened

if TYPE_CHECKING:
    import pyarrow as pa

#: Separators that are told from the headings.
FOUND_SEPARATORS = ",;\t|"

LONGEST_HEADING_LINE = 4_000_000
MOST_LINES_OF_HEADINGS = 100

#: Headings from which on DuckDB is given whole lines and splits them itself as lists: its own way
#: takes memory and time for each column. Only where no row has quotes.
MANY_HEADINGS = 1_000

#: A separator that stands in no line.
_NEVER = "\x01\x02\x03\x04"

#: Byte-order marks, the longer ones first, and the encoding each stands for.
BYTE_ORDER_MARKS = {
    b"\xff\xfe\0\0": "utf-32",
    b"\0\0\xfe\xff": "utf-32",
    b"\xff\xfe": "utf-16",
    b"\xfe\xff": "utf-16",
}
_UTF_8 = re.compile(r"utf[-_]?8([-_]sig)?", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class _Place:
    """A refusal whose text is still to be looked up."""

    line: int
    n_line: int
    column: str
    code: str
    reason: str
    text: str


class CsvSource(Source):
    """A CSV file."""

    def __init__(
        self, path: Path, packing: Packing | None = None, guide: ColumnGuide | None = None
    ) -> None:
        super().__init__(guide)
        self.path = path
        self.name = str(path)
        self.n_bytes = path.stat().st_size
        self._packing = packing
        self._lock = threading.Lock()
        self._survey: Survey | None = None
        self._parsed: Path = path  #: the file itself, or a tidied copy
        self._before_quotes: Path = path  #: the file as its lines stood before quotes were tidied
        self._aside: Path | None = None
        self._n_row: int | None = None
        self._encoding = self._told_encoding()
        try:
            self._n_before, headings = self._read_headings()
        except (OSError, EOFError, UnicodeError) as error:
            raise IntakeError(f"{path}: cannot be read ({error}). Send the file anew.") from error
        self._take_headings(headings)

    # --- Headings ---------------------------------------------------------------------------------

    def _told_encoding(self) -> str:
        with opened(self.path, self._packing) as file:
            beginning = file.read(4)
        for mark, encoding in BYTE_ORDER_MARKS.items():
            if beginning.startswith(mark):
                return encoding
        named = self.guide.file.encoding or "utf-8"
        return "utf-8-sig" if _UTF_8.fullmatch(named) else named

    @property
    def _is_utf_8(self) -> bool:
        return self._encoding == "utf-8-sig"

    @contextmanager
    def _text(self) -> Iterator[TextIO]:
        with opened(self.path, self._packing) as file, text_of(file, self._encoding) as text:
            yield text

    def _read_headings(self) -> tuple[int, list[str]]:
        """Return the number of lines up to the headings, and those."""
        with self._text() as text:
            n_before, n_skip = 0, self.guide.file.skip_lines
            for _ in range(n_skip):
                n_before += bool(text.readline(LONGEST_HEADING_LINE))
            while (line := text.readline(LONGEST_HEADING_LINE)) and not line.strip():
                n_before += 1
            if not line:
                raise IntakeError(
                    f"{self.name}: is empty{' after the lines to skip' if n_skip else ''}. A CSV "
                    "file begins with one line of headings."
                )
            self._separator = self.guide.file.separator or _found_separator(line)
            following = iter(lambda: text.readline(LONGEST_HEADING_LINE), "")
            reader = csv.reader(
                islice(_first_and(line, following), MOST_LINES_OF_HEADINGS),
                delimiter=self._separator,
            )
            try:
                headings = next(reader)
            except csv.Error as error:
                raise IntakeError(
                    f"{self.name}: line {n_before + 1} holds no headings ({error}). "
                    "A CSV file begins with one line of headings."
                ) from error
        if any(UNREADABLE in heading for heading in headings):
            encoding = "UTF-8" if self._is_utf_8 else self._encoding
            raise IntakeError(
                f"{self.name}: line {n_before + 1} is not {encoding} text. Save the file as UTF-8 "
                "CSV, or name its encoding in a column guide."
            )
        if any("\0" in heading for heading in headings):
            raise IntakeError(
                f"{self.name}: line {n_before + 1} holds NUL characters, as UTF-16 text does. Save "
                "the file as UTF-8 CSV, or name its encoding in a column guide."
            )
        self._first_line = n_before + 1
        return n_before + reader.line_num, [" ".join(heading.split("\n")) for heading in headings]

    @property
    def _heading_line(self) -> int:
        return self._first_line

    # --- Rows -------------------------------------------------------------------------------------

    def batches(
        self, select: Mapping[str, str], rows_a_batch: int = ROWS_A_BATCH
    ) -> Iterator[pa.RecordBatch]:
        self._surveyed()
        n_row = 0
        for batch in super().batches(select, rows_a_batch):
            n_row += len(batch)
            yield batch
        self._n_row = n_row

    def _surveyed(self) -> Survey:
        """Look at the file as a whole, and tidy it where needed; once."""
        with self._lock:
            if self._survey is None:
                try:
                    self._survey = self._look()
                except (OSError, EOFError, UnicodeError, ValueError) as error:
                    raise self._unreadable(error) from error
            return self._survey

    def _look(self) -> Survey:
        with opened(self.path, self._packing) as file:
            seen = of_file = survey(file, self._separator, self._n_before)
        if not (self._is_utf_8 and seen.one_line_end):
            copy = self._temporary_folder() / "lines.csv"
            with opened(self.path, self._packing) as file:
                copy_with_one_line_end(file, self._encoding, copy)
            self._parsed = self._before_quotes = copy
            with copy.open("rb") as file:
                seen = survey(file, self._separator, self._n_before)
        if not (seen.quotes_in_order and seen.lines_short):
            folder = self._temporary_folder()
            copy, aside = folder / "quotes.csv", folder / "aside.txt"
            with self._lines_before_quotes() as text:
                copy_with_quotes_in_order(
                    text, self._separator, self._n_before, len(self.headings), copy, aside
                )
            self._parsed, self._aside = copy, aside
        return replace(seen, checksum=of_file.checksum)

    @contextmanager
    def _lines_before_quotes(self) -> Iterator[TextIO]:
        if self._before_quotes == self.path:
            with self._text() as text:
                yield text
        else:
            with self._before_quotes.open("rb") as file, text_of(file, "utf-8") as text:
                yield text

    def _open_parsed(self) -> BinaryIO:
        packing = self._packing if self._parsed == self.path else None
        return opened(self._parsed, packing)

    @property
    def _as_lists(self) -> bool:
        return len(self.headings) > MANY_HEADINGS and not self._surveyed().quoted_rows

    def cell_at(self, place: int) -> str:
        return f"cells[{place + 1}]" if self._as_lists else super().cell_at(place)

    def cells_at(self, places: Sequence[int]) -> str:
        if not self._as_lists:
            return super().cells_at(places)
        if len(places) and list(places) == list(range(places[0], places[0] + len(places))):
            return f"cells[{places[0] + 1}:{places[0] + len(places)}]"
        return f"list_select(cells, [{', '.join(str(place + 1) for place in places)}])"

    def _table(self) -> str:
        if not self._as_lists:
            names = [f"c{place}" for place in range(len(self.headings))]
            return self._read_csv(names, self._separator, quote='"')
        lines = self._read_csv(["line"], _NEVER, quote="")
        n = len(self.headings)
        more_are_blank = f"len(list_filter(cells[{n + 1}:], lambda cell: cell != '')) = 0"
        return (
            f"(SELECT string_split(line, '{self._separator}') AS cells FROM {lines} "  # noqa: S608
            f"WHERE len(cells) = {n} OR (len(cells) > {n} AND {more_are_blank}))"
        )

    def _read_csv(self, names: Sequence[str], separator: str, quote: str) -> str:
        columns = ", ".join(f"'{name}': 'VARCHAR'" for name in names)
        path = str(self._parsed.absolute()).replace("'", "''")
        # Brackets and stars in a path would be taken for a pattern of several files.
        path = "".join(f"[{sign}]" if sign in "*?[" else sign for sign in path)
        packing = self._packing if self._parsed == self.path else None
        return (
            f"read_csv('{path}', auto_detect=false, header=false, skip={self._n_before}, "
            f"delim='{separator}', quote='{quote}', escape='{quote}', encoding='utf-8', "
            f"compression='{packing or 'none'}', strict_mode=true, columns={{{columns}}}, "
            # What it passes over is found again by `refusals`.
            f"ignore_errors=true, max_line_size={2 * LONGEST_RECORD}, "
            f"buffer_size={16 * LONGEST_RECORD})"
        )

    # --- Refusals ---------------------------------------------------------------------------------

    def refusals(self, findings: Findings) -> Iterator[Refusal]:
        seen = self._surveyed()
        all_came = self._n_row == seen.n_line - self._n_before
        if not len(findings) and all_came and self._aside is None:
            return
        places: Iterator[_Place] = self._from_records(findings)
        if self._aside is not None:
            left_out = (
                _Place(each.line, 1, "", each.code, each.reason, "")
                for each in read_aside(self._aside)
            )
            places = self._with_own_text(heapq.merge(places, left_out, key=lambda each: each.line))
        for each in places:
            yield Refusal(
                self.name, each.line, each.column, each.code, each.reason, each.text[:KEPT_TEXT]
            )

    def _from_records(self, findings: Findings) -> Iterator[_Place]:
        """Yield what is refused of the records that were parsed, in order."""
        waiting = findings.in_order()
        finding = next(waiting, None)
        n_good = 0
        with self._open_parsed() as file:
            for some in records(file, self._n_before, self._separator):
                good = some.are_readable(len(self.headings), self._separator)
                at = np.flatnonzero(good)
                wrong = iter(np.flatnonzero(~good).tolist())
                next_wrong = next(wrong, None)
                while finding is not None and finding.ordinal < n_good + len(at):
                    place = int(at[finding.ordinal - n_good])
                    while next_wrong is not None and next_wrong < place:
                        yield self._unsplit(some, next_wrong)
                        next_wrong = next(wrong, None)
                    yield _found(some, place, finding)
                    finding = next(waiting, None)
                while next_wrong is not None:
                    yield self._unsplit(some, next_wrong)
                    next_wrong = next(wrong, None)
                n_good += len(at)
        if finding is not None or self._n_row not in (None, n_good):
            raise IntakeError(
                f"{self.name}: {n_good:,} of its rows can be told apart, but {self._n_row or 0:,} were "
                "read. Nothing of it was kept; save the file anew as CSV."
            )

    def _unsplit(self, some: Records, place: int) -> _Place:
        """Return the refusal of a record that could not be split into fields."""
        if not some.is_text[place]:
            encoding = "UTF-8" if self._is_utf_8 else self._encoding
            code, reason = (
                "row.encoding",
                f"the row is not {encoding} text; save the file as UTF-8",
            )
        else:
            code, reason = (
                "row.columns",
                f"the row has {some.n_field[place]} fields; the headings have {len(self.headings)}",
            )
        line = int(some.line[place])
        return _Place(line, some.n_line(place), "", code, reason, some.text(place))

    def _with_own_text(self, places: Iterator[_Place]) -> Iterator[_Place]:
        """Replace the text of records in the copy by what stands in the file."""
        with self._lines_before_quotes() as text:
            lines = (line for line, _ in lines_of(text))
            number, of_line, own = 1, 0, ""
            for each in places:
                if each.line != of_line:
                    held = islice(lines, each.line - number, each.line - number + each.n_line)
                    own = "\n".join(held).replace(UNREADABLE, "\ufffd")
                    of_line, number = each.line, each.line + each.n_line
                yield replace(each, text=own)

    def fingerprint(self) -> str:
        if self._packing is None:
            return self._surveyed().checksum
        return checksum_of(self.path)


def _found(some: Records, place: int, finding: Finding) -> _Place:
    return _Place(
        int(some.line[place]),
        some.n_line(place),
        finding.column,
        finding.code,
        finding.reason,
        some.text(place),
    )


def _first_and(line: str, following: Iterator[str]) -> Iterator[str]:
    yield line
    yield from following


def _found_separator(line: str) -> str:
    """Return the sign that separates headings: the one that stands most often outside quotes."""
    bare = re.sub(r'"[^"]*"?', "", line)
    return max(FOUND_SEPARATORS, key=bare.count)
