"""Rows of text under headings, whatever form of file they come from; read by DuckDB.

Every column is read as text, so that a refused row can be shown as it stood, and typed in SQL.
Rows arrive in file order; their ordinal, counted from 0, is their name until a refusal needs the
place that a person can look up.
"""

from __future__ import annotations

import tempfile
import weakref
from abc import ABC, abstractmethod
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from shutil import rmtree
from typing import TYPE_CHECKING

import duckdb

from tracker.errors import IntakeError
from tracker.intake.guide import ColumnGuide, matched
from tracker.intake.report import Finding, Findings, Refusal

if TYPE_CHECKING:
    import pandas as pd
    import pyarrow as pa

ROWS_A_BATCH = 1_000_000

#: What DuckDB may hold in memory before it writes to a temporary folder.
MEMORY_LIMIT = "1GB"

#: Columns from which on DuckDB no longer looks for expressions that occur twice: the time for that
#: grows with the square of their number.
MANY_COLUMNS = 100


class Source(ABC):
    """Rows of text under headings.

    Parameters
    ----------
    guide : ColumnGuide, optional
        Renames headings, and says how numbers are written and in which unit.
    """

    name: str
    headings: list[str]  #: in file order, ours where the guide names them
    n_bytes: int
    on_batch: Callable[[int], None] | None = None  #: told the number of rows of each batch

    def __init__(self, guide: ColumnGuide | None = None) -> None:
        self.guide = guide or ColumnGuide()
        self._database = duckdb.connect()
        self._database.execute("SET TimeZone = 'UTC'")
        self._database.execute(f"SET memory_limit = '{MEMORY_LIMIT}'")
        self._database.execute("SET enable_progress_bar = true")  # or it counts no progress
        self._database.execute("SET enable_progress_bar_print = false")
        self._set_folder = False
        self._own_headings: list[str] = []
        self._places: dict[str, list[int]] = {}

    # --- Headings ---------------------------------------------------------------------------------

    def _take_headings(self, theirs: Sequence[str]) -> None:
        """Take the headings of the file; the guide's names stand before the file's own."""
        self._own_headings = [heading.strip() for heading in theirs]
        self.headings = list(self._own_headings)
        ours = {matched(own): ours for ours in self.guide.columns for own in self.guide.named(ours)}
        renamed: set[str] = set()
        for place, heading in enumerate(self._own_headings):
            if name := ours.get(matched(heading)):
                self.headings[place] = name
                renamed.add(matched(name))
        for place, heading in enumerate(self.headings):
            key = matched(heading)
            if key not in renamed or matched(self._own_headings[place]) in ours:
                self._places.setdefault(key, []).append(place)

    def has(self, heading: str) -> bool:
        """Say whether there is a column of this heading."""
        return matched(heading) in self._places

    def place_of(self, heading: str) -> int:
        """Return the place of a column.

        Raises
        ------
        IntakeError
            If there is none, or there are several.
        """
        places = self._places.get(matched(heading), [])
        if not places:
            raise IntakeError(
                f"{self.name}: there is no column {heading!r}{self.said_of(heading)}; "
                f"found {', '.join(self._own_headings[:30])}."
            )
        if len(places) > 1:
            names = [self._own_headings[place] for place in places]
            others = [repr(name) for name in dict.fromkeys(names[1:]) if name != names[0]]
            also = f" (the other time as {', '.join(others)})" if others else ""
            raise IntakeError(
                f"{self.name}: heading {names[0]!r} stands twice in line {self._heading_line}{also}"
                f"{self.said_of(heading)}. Rename or remove one."
            )
        return places[0]

    def said_of(self, heading: str) -> str:
        """Return what the guide says of a heading, to end a message with; blank if nothing."""
        named = self.guide.named(heading)
        if not named:
            return ""
        return f" ({self.guide.name} names {' or '.join(map(repr, named))} for it)"

    @property
    def _heading_line(self) -> int:
        return 1

    def left_out(self, used: Sequence[str]) -> list[str]:
        """Return the headings, as the file has them, that are not among the used ones."""
        known = {matched(heading) for heading in used}
        return [
            own
            for place, own in enumerate(self._own_headings)
            if own
            and (
                matched(self.headings[place]) not in known
                or place not in self._places.get(matched(self.headings[place]), ())
            )
        ]

    # --- Columns as SQL ---------------------------------------------------------------------------

    def cell_of(self, heading: str) -> str:
        """Return the SQL name of a column of text."""
        return self.cell_at(self.place_of(heading))

    def cell_at(self, place: int) -> str:
        """Return the SQL name of the column of text at a place."""
        return f"c{place}"

    def text_of(self, heading: str) -> str:
        """Return the SQL expression of a column as trimmed text, NULL when blank."""
        return f"nullif(trim({self.cell_of(heading)}), '')"

    def number_of(self, heading: str) -> str:
        """Return the SQL expression of a column as numbers in the unit of its heading.

        NULL where there is no finite number.
        """
        return self.number_at(self.place_of(heading), heading)

    def number_at(self, place: int, heading: str) -> str:
        """Return the column at a place as numbers in the unit of a heading of ours."""
        number = self.guide.unit_sql(heading, self._number(place))
        return f"CASE WHEN isfinite({number}) THEN {number} END"

    def cells_at(self, places: Sequence[int]) -> str:
        """Return one SQL list of the columns of text at many places.

        For files of thousands of columns, where an expression for each takes minutes.
        """
        return f"[{', '.join(map(self.cell_at, places))}]"

    def numbers_at(self, places: Sequence[int], heading: str) -> str:
        """Return one SQL list of the columns at many places as numbers; see `number_at`."""
        numbers = self._numbers(places)
        in_unit = self.guide.unit_sql(heading, "x")
        return (
            f"list_transform({numbers}, lambda x: CASE WHEN isfinite({in_unit}) THEN {in_unit} END)"
        )

    def _number(self, place: int) -> str:
        return f"TRY_CAST({self._plain_digits(self.cell_at(place))} AS DOUBLE)"

    def _numbers(self, places: Sequence[int]) -> str:
        texts = self.cells_at(places)
        plain = self._plain_digits("x")
        if plain != "x":
            texts = f"list_transform({texts}, lambda x: {plain})"
        return f"TRY_CAST({texts} AS DOUBLE[])"

    def _plain_digits(self, text: str) -> str:
        """Return the SQL of a text with a decimal point and no marks between thousands.

        A sign that is neither makes the text no number: 1.234 is twelve hundred where a comma is
        the decimal sign, and must not become one and a bit.
        """
        form = self.guide.file
        plain = text
        if form.decimal == ",":
            plain = f"translate({text}, ',.', '.!')"
        if form.thousands:
            mark = "''" if form.thousands == "'" else form.thousands
            dot = "\\." if form.decimal == "." else ","
            pattern = f"\\s*[+-]?\\d{{1,3}}([{mark}]\\d{{3}})+({dot}\\d*)?\\s*"
            bare = f"replace({text}, '{mark}', '')"
            if form.decimal == ",":
                bare = f"replace({bare}, ',', '.')"
            plain = f"CASE WHEN regexp_full_match({text}, '{pattern}') THEN {bare} ELSE {plain} END"
        return plain

    # --- Rows -------------------------------------------------------------------------------------

    def batches(
        self, select: Mapping[str, str], rows_a_batch: int = ROWS_A_BATCH
    ) -> Iterator[pa.RecordBatch]:
        """Stream columns `{name: SQL expression}` in file order.

        Raises
        ------
        IntakeError
            If the file cannot be read to its end.
        """
        columns = ", ".join(f'{expression} AS "{name}"' for name, expression in select.items())
        without = "common_subexpressions" if len(select) > MANY_COLUMNS else ""
        try:
            self._spill_to_disk()
            self._database.execute(f"SET disabled_optimizers = '{without}'")
            query = f"SELECT {columns} FROM {self._table()}"  # noqa: S608 - our own names, no input
            for batch in self._database.sql(query).to_arrow_reader(rows_a_batch):
                yield batch
                if self.on_batch is not None:
                    self.on_batch(len(batch))
        # Arrow wraps what DuckDB raises between batches.
        except (duckdb.Error, OSError, ValueError, UnicodeError) as error:
            raise self._unreadable(error) from error

    def _unreadable(self, error: Exception) -> IntakeError:
        cause = str(error).strip().splitlines()[0:1] or [type(error).__name__]
        return IntakeError(
            f"{self.name}: cannot be read to its end ({cause[0][:200]}). "
            "Nothing of it was kept; send or unpack the file anew."
        )

    def frame(self, select: Mapping[str, str]) -> pd.DataFrame:
        """Return columns `{name: SQL expression}` as one frame, in file order."""
        import pyarrow as pa  # noqa: PLC0415 - heavy

        batches = list(self.batches(select))
        if not batches:
            import pandas as pd  # noqa: PLC0415 - heavy

            return pd.DataFrame({name: pd.Series(dtype=object) for name in select})
        frame: pd.DataFrame = pa.Table.from_batches(batches).to_pandas()
        return frame

    def share_read(self) -> float | None:
        """Return the share of the file that has been streamed, 0 to 1; None while unknown."""
        percent = self._database.query_progress()
        return min(percent / 100.0, 1.0) if percent >= 0 else None

    def _spill_to_disk(self) -> None:
        """Let DuckDB write what does not fit into memory to a folder that goes when we go."""
        if not self._set_folder:
            folder = str(self._temporary_folder()).replace("'", "''")
            self._database.execute(f"SET temp_directory = '{folder}'")
            self._set_folder = True

    def _temporary_folder(self) -> Path:
        folder = Path(tempfile.mkdtemp(prefix="tracker-"))
        weakref.finalize(self, rmtree, folder, ignore_errors=True)
        return folder

    @abstractmethod
    def _table(self) -> str:
        """Return the SQL table expression."""

    @abstractmethod
    def refusals(self, findings: Findings) -> Iterator[Refusal]:
        """Turn findings, and rows that no parser can take, into refusals, in file order.

        Call it after the rows have been streamed to their end. Memory does not grow with their
        number.
        """

    @abstractmethod
    def fingerprint(self) -> str:
        """Return a checksum of the content."""


def refused(file: str, line: int, finding: Finding, text: str) -> Refusal:
    """Return the refusal of a finding whose place is known."""
    return Refusal(file, line, finding.column, finding.code, finding.reason, text)
