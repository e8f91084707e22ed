"""The layout with one column a meter: a stamp, then a value under the id of each."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from tracker.errors import IntakeError
from tracker.intake.chunk import Part
from tracker.intake.columns import Cells, flags_of, refuse_stamps
from tracker.intake.quality import QualityCodes
from tracker.intake.readings import ReadingsIntake
from tracker.intake.source import Source, matched
from tracker.intake.stamps import StampReader
from tracker.intake.texts import KnownTexts, Texts
from tracker.store.models import ID_LENGTH

#: Columns of a file read side by side; one with more is read several times.
COLUMNS_A_PASS = 1_000

#: Cells held in memory at a time.
CELLS_A_BATCH = 2_000_000


def id_columns(source: Source) -> list[int]:
    """Return the places of the columns whose heading is an id.

    Raises
    ------
    IntakeError
        If an id stands twice, or is blank or too long.
    """
    places = [
        place
        for place, heading in enumerate(source.headings)
        if matched(heading) not in ("readat", "quality")
    ]
    for name, times in Counter(source.headings[place] for place in places).items():
        if times > 1:
            raise IntakeError(f"{source.name}: heading {name!r} stands {times} times. Remove one.")
        if not 0 < len(name) <= ID_LENGTH:
            raise IntakeError(
                f"{source.name}: heading {name[:40]!r} is no id; allowed: 1 to {ID_LENGTH} characters."
            )
    return places


def take_wide(source: Source, intake: ReadingsIntake, quality: QualityCodes) -> None:
    """Stream a file with a column of each series into an intake; cells that are not blank count.

    A quality stands for all cells of its row.

    Raises
    ------
    IntakeError
        If a column holds text only, so that its heading is no id.
    """
    stamps = StampReader(
        source.name, intake.options.timezone, stamp_format=intake.options.stamp_format
    )
    places = id_columns(source)
    for first in range(0, len(places), COLUMNS_A_PASS):
        _take_columns(source, intake, places[first : first + COLUMNS_A_PASS], stamps, quality)


def _take_columns(
    source: Source,
    intake: ReadingsIntake,
    places: Sequence[int],
    stamps: StampReader,
    quality: QualityCodes,
) -> None:
    select = {
        "stamp": source.cell_of("read_at"),
        "quality": source.text_of("quality") if source.has("quality") else "NULL",
    }
    select |= Cells.select(source, places, intake.rules[0].heading)
    names = [source.headings[place] for place in places]
    series = np.array([intake.place_of(name) for name in names], dtype=np.int32)
    known_stamps, known_words = KnownTexts(), KnownTexts()
    ordinal = 0
    for batch in source.batches(select, max(1, CELLS_A_BATCH // len(places))):
        cells = Cells.of(batch, len(names))
        if ordinal == 0:
            _check_numbers(source.name, cells, names)
        rows = np.arange(ordinal, ordinal + len(batch), dtype=np.int64)
        ordinal += len(batch)
        stamp = known_stamps.of(batch.column("stamp"))
        words = known_words.of(batch.column("quality"))
        intake.add(_unfolded(intake, stamp, words, cells, rows, names, series, stamps, quality))


def _check_numbers(file: str, cells: Cells, names: Sequence[str]) -> None:
    """Notice a file of another layout, whose headings are no ids."""
    found = cells.text_only()
    if found is not None:
        column, text = found
        raise IntakeError(
            f"{file}: column {names[column]!r} holds text such as {text[:40]!r}, so this is no file of "
            "one column a meter. Name its columns with a guide: `tracker import guide FILE` drafts one."
        )


def _unfolded(
    intake: ReadingsIntake,
    stamp: Texts,
    words: Texts,
    cells: Cells,
    rows: NDArray[np.int64],
    names: Sequence[str],
    series: NDArray[np.int32],
    stamps: StampReader,
    quality: QualityCodes,
) -> Part:
    """Turn columns into readings, column by column and in the order of the rows."""
    filled = cells.filled.T

    def refuse(lost: NDArray[np.bool_], column: str, code: str, reason: str) -> None:
        """Refuse all cells of the rows."""
        del column
        for place in np.flatnonzero((filled & lost).any(axis=1)).tolist():
            intake.findings.add(rows[filled[place] & lost], names[place], code, reason)

    good = np.ones(len(rows), dtype=np.bool_)
    table = stamps.read(stamp.distinct)
    refuse_stamps(table, stamp.place, good, "read_at", refuse)
    flags = flags_of(words, len(rows), quality, good, refuse)
    cells.note_wrong(intake.findings, rows, good, names)
    kept = filled & ~cells.wrong.T & good
    column_of, row_of = np.nonzero(kept)
    first_s = table.first_s[stamp.place][row_of]
    twice = (table.first_s != table.second_s).any()
    second_s = table.second_s[stamp.place][row_of] if twice else first_s
    intake.snapped += int(table.snapped[stamp.place][row_of].sum())
    return Part(
        series[column_of],
        first_s,
        second_s,
        cells.number.T[kept][np.newaxis],
        flags[row_of],
        rows[row_of],
    )
