"""Where rows come from: a CSV file, plain or gzipped, or a pandas frame; read by DuckDB.

Every column is read as text, so that a refused row can be shown as it stood, and typed in SQL.
Rows arrive in file order; their ordinal, counted from 0, is their name until a refusal needs the
line that an editor shows.
"""

from __future__ import annotations

import csv
import gzip
import io
import itertools
from abc import ABC, abstractmethod
from collections import deque
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO, cast

import duckdb
import xxhash

from tracker.errors import InputError, IntakeError
from tracker.intake.report import KEPT_TEXT, Finding, Refusal

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa

GZIP_MAGIC = b"\x1f\x8b"
LONGEST_HEADING_LINE = 4_000_000
SEPARATORS = ",;\t"
ROWS_A_BATCH = 1_000_000


def open_source(given: Path | str | pd.DataFrame) -> Source:
    """Open a file or a frame.

    Raises
    ------
    InputError
        If there is no such file.
    IntakeError
        If the file has no headings that can be read.
    """
    if isinstance(given, (str, Path)):
        return CsvSource(Path(given))
    return FrameSource(given)


def matched(heading: str) -> str:
    """Return a heading as it is compared: without regard to case, spaces or underscores.

    >>> matched(" Unit_ID")
    'unitid'
    """
    return "".join(heading.split()).replace("_", "").casefold()


class Source(ABC):
    """Rows of text under headings."""

    name: str
    headings: list[str]
    n_bytes: int

    def __init__(self) -> None:
        self._database = duckdb.connect()
        self._database.execute("SET TimeZone = 'UTC'")
        self._column_of: dict[str, int] = {}

    def _index_headings(self) -> None:
        for place, heading in enumerate(self.headings):
            key = matched(heading)
            if key in self._column_of:
                raise IntakeError(
                    f"{self.name}: heading {heading!r} stands twice in line 1. Rename or remove one."
                )
            self._column_of[key] = place

    def has(self, heading: str) -> bool:
        """Say whether there is a column of this heading."""
        return matched(heading) in self._column_of

    def text_of(self, heading: str) -> str:
        """Return the SQL expression of a column as trimmed text, NULL when blank."""
        return f"nullif(trim({self.cell_of(heading)}), '')"

    def cell_of(self, heading: str) -> str:
        """Return the SQL name of a column."""
        return f"c{self._column_of[matched(heading)]}"

    def left_out(self, used: Sequence[str]) -> list[str]:
        """Return the headings that are not among the used ones."""
        known = {matched(heading) for heading in used}
        return [heading for heading in self.headings if matched(heading) not in known]

    def batches(self, select: Mapping[str, str]) -> Iterator[pa.RecordBatch]:
        """Stream columns `{name: SQL expression}` in file order.

        Raises
        ------
        IntakeError
            If the file cannot be read to its end.
        """
        columns = ", ".join(f"{expression} AS {name}" for name, expression in select.items())
        query = f"SELECT {columns} FROM {self._table()}"  # noqa: S608 - our own names, no input
        try:
            yield from self._database.sql(query).to_arrow_reader(ROWS_A_BATCH)
        except duckdb.Error as error:
            cause = str(error).splitlines()[0]
            raise IntakeError(
                f"{self.name}: cannot be read to its end ({cause}). "
                "Nothing of it was kept; send or unpack the file anew."
            ) from error

    def frame(self, select: Mapping[str, str]) -> pd.DataFrame:
        """Return columns `{name: SQL expression}` as one frame, in file order."""
        import pyarrow as pa  # noqa: PLC0415 - heavy

        batches = list(self.batches(select))
        if not batches:
            import pandas as pd  # noqa: PLC0415 - heavy

            return pd.DataFrame({name: pd.Series(dtype=object) for name in select})
        frame: pd.DataFrame = pa.Table.from_batches(batches).to_pandas()
        return frame

    @abstractmethod
    def _table(self) -> str:
        """Return the SQL table expression."""

    @abstractmethod
    def refusals(self, findings: Sequence[Finding]) -> list[Refusal]:
        """Turn findings, and rows that no parser can take, into refusals, in file order.

        Call it after the rows have been streamed to their end.
        """

    @abstractmethod
    def fingerprint(self) -> str:
        """Return a checksum of the content."""


class CsvSource(Source):
    """A CSV file: comma, semicolon or tab; quoted or not; plain or gzipped."""

    def __init__(self, path: Path) -> None:
        super().__init__()
        if path.is_dir():
            raise InputError(f"{path} is a folder, not a file. Name the files in it.")
        if not path.is_file():
            raise InputError(f"{path} is not there. Check the name and the folder.")
        self.path = path
        self.name = str(path)
        self.n_bytes = path.stat().st_size
        try:
            with path.open("rb") as file:
                self._gzipped = file.read(2) == GZIP_MAGIC
            self._blank_lines, line = self._heading_line()
        except (OSError, EOFError, gzip.BadGzipFile) as error:
            raise IntakeError(f"{path}: cannot be read ({error}). Send the file anew.") from error
        self._separator = max(SEPARATORS, key=line.count)
        try:
            row = next(csv.reader([line], delimiter=self._separator))
        except csv.Error as error:
            raise IntakeError(
                f"{path}: line {self._blank_lines + 1} holds no headings ({error}). "
                "A CSV file begins with one line of headings."
            ) from error
        self.headings = [heading.strip() for heading in row]
        self._index_headings()

    def _open(self) -> BinaryIO:
        if self._gzipped:
            return cast("BinaryIO", gzip.open(self.path, "rb"))
        return self.path.open("rb")

    def _heading_line(self) -> tuple[int, str]:
        """Return the number of blank lines before the headings, and their line."""
        with self._open() as file:
            for number in itertools.count():
                line = file.readline(LONGEST_HEADING_LINE)
                if not line:
                    raise IntakeError(
                        f"{self.name}: is empty. A CSV file begins with one line of headings."
                    )
                try:
                    text = line.decode("utf-8-sig").rstrip("\r\n")
                except UnicodeDecodeError as error:
                    raise IntakeError(
                        f"{self.name}: line {number + 1} is not UTF-8 text. Save the file as UTF-8 CSV."
                    ) from error
                if "\r" in text:
                    raise IntakeError(
                        f"{self.name}: its lines end in a lone carriage return. "
                        "Save the file with the line ends of Windows (CR LF) or Unix (LF)."
                    )
                if text.strip():
                    return number, text
        raise AssertionError  # unreachable: count() has no end

    def _table(self) -> str:
        columns = ", ".join(f"'c{place}': 'VARCHAR'" for place in range(len(self.headings)))
        path = str(self.path).replace("'", "''")
        # Brackets and stars in a path would be taken for a pattern of several files.
        path = "".join(f"[{sign}]" if sign in "*?[" else sign for sign in path)
        return (
            f"read_csv('{path}', auto_detect=false, header=true, skip={self._blank_lines}, "
            f"delim='{self._separator}', quote='\"', escape='\"', encoding='utf-8', "
            f"compression='{'gzip' if self._gzipped else 'none'}', "
            # Blank lines before the headings may end otherwise than the rest.
            f"strict_mode={'false' if self._blank_lines else 'true'}, "
            f"columns={{{columns}}}, store_rejects=true)"
        )

    def refusals(self, findings: Sequence[Finding]) -> list[Refusal]:
        broken = self._broken_records()
        if not findings and not broken:
            return []
        wanted: dict[int, list[Finding]] = {}
        for finding in findings:
            wanted.setdefault(finding.ordinal, []).append(finding)
        refusals: list[Refusal] = []
        ordinal = -1
        for end_byte, line, text in self._records():
            if broken and broken[0][0] < end_byte:
                refusals.append(Refusal(self.name, line, *broken.popleft()[1:], text))
            else:
                ordinal += 1
                refusals.extend(
                    Refusal(self.name, line, finding.column, finding.code, finding.reason, text)
                    for finding in wanted.pop(ordinal, ())
                )
            if not wanted and not broken:
                break
        return refusals

    def _broken_records(self) -> deque[tuple[int, str, str, str]]:
        """Return the records DuckDB could not split, in order: (byte, column, code, reason).

        The byte lies in the record, or in blank lines before it. A record may be named several
        times; its first complaint is kept.
        """
        rows = self._database.execute(
            "SELECT line_byte_position, column_name, error_type, error_message FROM reject_errors "
            "ORDER BY line_byte_position, byte_position"
        ).fetchall()
        self._database.execute("DELETE FROM reject_errors")
        broken: dict[int, tuple[int, str, str, str]] = {}
        for byte, column, kind, message in rows:
            heading = self.headings[int(column[1:])] if column else ""
            broken.setdefault(int(byte), (int(byte), heading, *_plain_words(kind, message)))
        return deque(broken.values())

    def _records(self) -> Iterator[tuple[int, int, str]]:
        """Yield (byte after it, line number, text) of each record after the headings.

        A record is a line, or several when a quoted field holds line breaks; blank ones are passed
        over, as DuckDB does.
        """
        with self._open() as file:
            byte = sum(len(file.readline()) for _ in range(self._blank_lines + 1))
            first_line, held, is_open = 0, "", False
            for number, raw in enumerate(file, start=self._blank_lines + 2):
                line = raw.decode("utf-8", errors="replace").rstrip("\r\n")
                if not is_open:
                    first_line, held = number, line
                elif len(held) < KEPT_TEXT:
                    held += "\n" + line
                byte += len(raw)
                is_open = _quote_is_open(line, self._separator, is_open)
                if held and not is_open:
                    yield byte, first_line, held[:KEPT_TEXT]
            if is_open:
                yield byte, first_line, held[:KEPT_TEXT]

    def fingerprint(self) -> str:
        digest = xxhash.xxh3_128()
        with self.path.open("rb") as file:
            while part := file.read(1 << 20):
                digest.update(part)
        return digest.hexdigest()


def _quote_is_open(line: str, separator: str, is_open: bool) -> bool:
    """Say whether a quoted field is open at the end of a line; `is_open` says it of the beginning.

    A quote opens a field only at its very beginning; anywhere else it is a sign like any.
    """
    if '"' not in line:
        return is_open
    at = 0
    while True:
        if is_open:
            at = line.find('"', at)
            if at < 0:
                return True
            if line.startswith('""', at):
                at += 2
                continue
            is_open = False
        elif line.startswith('"', at):
            is_open = True
            at += 1
            continue
        at = line.find(separator, at)
        if at < 0:
            return False
        at += 1


def _plain_words(kind: str, message: str) -> tuple[str, str]:
    """Say in our words why a record could not be split into fields."""
    if kind in ("MISSING COLUMNS", "TOO MANY COLUMNS"):
        expected, _, found = message.partition(" Found: ")
        return (
            "row.columns",
            f"the row has {found} fields; the headings have {expected.rpartition(' ')[2]}",
        )
    if kind == "INVALID ENCODING":
        return "row.encoding", "the row is not UTF-8 text; save the file as UTF-8"
    if kind == "UNQUOTED VALUE":
        return (
            "row.quotes",
            'a quoted field is not closed, or text stands behind its closing quote (")',
        )
    if kind == "LINE SIZE OVER MAXIMUM":
        return "row.too_long", "the row is longer than 2 MB; one record a line is expected"
    return "row.unreadable", message.splitlines()[0] if message else kind.lower()


class FrameSource(Source):
    """A pandas frame; its row 0 is reported as line 2, as if it were written to a file."""

    name = "<frame>"

    def __init__(self, frame: pd.DataFrame) -> None:
        super().__init__()
        self._frame = frame
        self.headings = [str(heading).strip() for heading in frame.columns]
        self.n_bytes = int(frame.memory_usage().sum())
        self._index_headings()
        renamed = frame.set_axis([f"k{place}" for place in range(frame.shape[1])], axis=1)
        self._database.register("given", renamed)

    def _table(self) -> str:
        columns = ", ".join(
            f"k{i}{'::DATE' if _are_dates(self._frame.iloc[:, i]) else ''}::VARCHAR AS c{i}"
            for i in range(len(self.headings))
        )
        return f"(SELECT {columns} FROM given)"  # noqa: S608 - our own names, no input

    def refusals(self, findings: Sequence[Finding]) -> list[Refusal]:
        return [
            Refusal(
                self.name,
                finding.ordinal + 2,
                finding.column,
                finding.code,
                finding.reason,
                _row_text(self._frame.iloc[finding.ordinal].tolist()),
            )
            for finding in sorted(findings, key=lambda finding: finding.ordinal)
        ]

    def fingerprint(self) -> str:
        import pandas as pd  # noqa: PLC0415 - heavy

        hashes = pd.util.hash_pandas_object(self._frame, index=False).to_numpy()
        return xxhash.xxh3_128(hashes.tobytes()).hexdigest()


def _are_dates(column: pd.Series) -> bool:
    """Say whether times without a zone are midnights all: dates, which pandas has no type for."""
    import pandas as pd  # noqa: PLC0415 - heavy

    if not pd.api.types.is_datetime64_dtype(column.dtype):
        return False
    known = column.dropna()
    return bool((known == known.dt.normalize()).all())


def _row_text(values: Sequence[Any]) -> str:
    import pandas as pd  # noqa: PLC0415 - heavy

    row = io.StringIO()
    csv.writer(row, lineterminator="").writerow(
        ["" if pd.isna(value) else value for value in values]
    )
    return row.getvalue()[:KEPT_TEXT]
