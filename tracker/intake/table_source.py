"""Tables whose columns have types: pandas frames and Parquet files."""

from __future__ import annotations

import csv
import io
from abc import abstractmethod
from collections.abc import Iterator, Sequence
from itertools import groupby
from pathlib import Path
from typing import TYPE_CHECKING, Any

import duckdb
import xxhash

from tracker.intake.guide import ColumnGuide, matched
from tracker.intake.report import KEPT_TEXT, Findings, Refusal
from tracker.intake.rows import Source, refused
from tracker.intake.unpack import checksum_of

if TYPE_CHECKING:
    import pandas as pd

PARQUET_MAGIC = b"PAR1"

#: Types of DuckDB that are read as numbers as they are. A FLOAT goes through its shortest text, so
#: that it means the same as in a CSV file.
NUMBERS = ("TINYINT", "SMALLINT", "INTEGER", "BIGINT", "HUGEINT", "DOUBLE", "DECIMAL")

#: Headings under which a time at midnight is a date; pandas has no type for those.
DATES = frozenset(
    map(matched, ("date", "installed_on", "removed_on", "starts_on", "ends_on", "month"))
)

#: Rows looked up at a time to show what was refused.
ROWS_SHOWN = 2_000


class TableSource(Source):
    """A table whose row 0 is reported as line 2, as if it were written to a file."""

    def __init__(self, guide: ColumnGuide | None) -> None:
        super().__init__(guide)
        self._types: list[str] = []

    def _learn_columns(self, headings: Sequence[str]) -> None:
        self._take_headings(headings)
        described = self._database.execute(f"DESCRIBE FROM {self._raw()}").fetchall()
        self._types = [str(kind) for _, kind, *_ in described[: len(headings)]]

    @abstractmethod
    def _raw(self) -> str:
        """Return the SQL table whose columns are k0, k1, …, as they are typed."""

    def _table(self) -> str:
        return f"{self._raw()} AS raw"

    def cell_at(self, place: int) -> str:
        column = f"raw.k{place}"
        if self._types[place].startswith("TIMESTAMP") and matched(self.headings[place]) in DATES:
            return (
                f"CASE WHEN {column} = date_trunc('day', {column}) THEN {column}::DATE::VARCHAR "
                f"ELSE {column}::VARCHAR END"
            )
        return column if self._types[place] == "VARCHAR" else f"{column}::VARCHAR"

    def _number(self, place: int) -> str:
        if self._types[place].startswith(NUMBERS) or self._types[place].startswith("U"):
            return f"raw.k{place}::DOUBLE"
        if self._types[place] == "FLOAT":
            return f"TRY_CAST(raw.k{place}::VARCHAR AS DOUBLE)"
        return super()._number(place)

    def _numbers(self, places: Sequence[int]) -> str:
        return f"[{', '.join(map(self._number, places))}]"

    def refusals(self, findings: Findings) -> Iterator[Refusal]:
        rows = groupby(findings.in_order(), key=lambda finding: finding.ordinal)
        # Findings of one row come together; rows are looked up some at a time.
        held = []
        for ordinal, of_row in rows:
            held.append((ordinal, list(of_row)))
            if len(held) == ROWS_SHOWN:
                yield from self._shown(held)
                held = []
        yield from self._shown(held)

    def _shown(self, held: Sequence[tuple[int, list[Any]]]) -> Iterator[Refusal]:
        texts = self._row_texts([ordinal for ordinal, _ in held]) if held else []
        for (ordinal, findings), text in zip(held, texts, strict=True):
            for finding in findings:
                yield refused(self.name, ordinal + 2, finding, text)

    @abstractmethod
    def _row_texts(self, ordinals: Sequence[int]) -> list[str]:
        """Return rows as a CSV file would show them."""


class FrameSource(TableSource):
    """A pandas frame."""

    name = "<frame>"

    def __init__(self, frame: pd.DataFrame, guide: ColumnGuide | None = None) -> None:
        super().__init__(guide)
        self._frame = frame
        self.n_bytes = int(frame.memory_usage().sum())
        renamed = frame.set_axis([f"k{place}" for place in range(frame.shape[1])], axis=1)
        try:
            self._database.register("given", renamed)
            self._learn_columns([str(heading) for heading in frame.columns])
        except (duckdb.Error, TypeError, ValueError) as error:
            raise self._unreadable(error) from error

    def _raw(self) -> str:
        return "given"

    def _row_texts(self, ordinals: Sequence[int]) -> list[str]:
        return [_row_text(self._frame.iloc[ordinal].tolist()) for ordinal in ordinals]

    def fingerprint(self) -> str:
        import pandas as pd  # noqa: PLC0415 - heavy

        try:
            hashes = pd.util.hash_pandas_object(self._frame, index=False).to_numpy()
        except TypeError:  # cells that pandas cannot hash, such as lists
            hashes = pd.util.hash_pandas_object(self._frame.astype(str), index=False).to_numpy()
        return xxhash.xxh3_128(hashes.tobytes()).hexdigest()


class ParquetSource(TableSource):
    """A Parquet file."""

    def __init__(self, path: Path, guide: ColumnGuide | None = None) -> None:
        super().__init__(guide)
        self.path = path
        self.name = str(path)
        self.n_bytes = path.stat().st_size
        try:
            found = self._database.execute(f"DESCRIBE FROM {self._file()}").fetchall()
            self._columns = [str(name) for name, *_ in found]
            self._learn_columns(self._columns)
        except (duckdb.Error, OSError, ValueError) as error:
            raise self._unreadable(error) from error

    def _file(self) -> str:
        path = str(self.path.absolute()).replace("'", "''")
        path = "".join(f"[{sign}]" if sign in "*?[" else sign for sign in path)
        return f"read_parquet('{path}', hive_partitioning=false)"

    def _raw(self) -> str:
        columns = ", ".join(
            f'"{name.replace(chr(34), chr(34) * 2)}" AS k{place}'
            for place, name in enumerate(self._columns)
        )
        return f"(SELECT {columns} FROM {self._file()})"  # noqa: S608 - quoted names

    def _row_texts(self, ordinals: Sequence[int]) -> list[str]:
        wanted = ", ".join(map(str, ordinals))
        columns = ", ".join(self.cell_at(place) for place in range(len(self._columns)))
        inner = self._raw().removeprefix("(SELECT ").removesuffix(f" FROM {self._file()})")
        file = self._file().replace("false)", "false, file_row_number=true)")
        rows = self._database.execute(
            f"SELECT {columns} FROM (SELECT {inner}, file_row_number FROM {file}) AS raw "  # noqa: S608
            f"WHERE file_row_number IN ({wanted}) ORDER BY file_row_number"
        ).fetchall()
        return [_row_text(row) for row in rows]

    def fingerprint(self) -> str:
        return checksum_of(self.path)


def _row_text(values: Sequence[Any]) -> str:
    import pandas as pd  # noqa: PLC0415 - heavy

    row = io.StringIO()
    csv.writer(row, lineterminator="").writerow(
        ["" if pd.api.types.is_scalar(value) and pd.isna(value) else value for value in values]
    )
    return row.getvalue()[:KEPT_TEXT]
