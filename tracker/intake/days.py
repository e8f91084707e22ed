"""The layout with one row a day: a column an interval, in local order from midnight."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.errors import IntakeError
from tracker.intake.chunk import Part
from tracker.intake.columns import Cells, flags_of, refuse_stamps, series_of
from tracker.intake.quality import QualityCodes
from tracker.intake.readings import ReadingOptions, ReadingsIntake
from tracker.intake.source import Source
from tracker.intake.stamps import StampReader
from tracker.intake.texts import KnownTexts, Texts

#: A heading that names an interval of the day: h01 to h25, or a time of day.
INTERVAL_HEADING = re.compile(r"h\d{1,3}|\d{1,2}:\d{2}(:\d{2})?", re.IGNORECASE)

#: Interval columns of an ordinary day: interval length [min]. A day that has an hour more brings
#: that hour's columns, blank on other days.
DAY_COLUMNS = {24: 60, 48: 30, 72: 20, 96: 15, 144: 10, 288: 5}

#: Cells held in memory at a time.
CELLS_A_BATCH = 2_000_000


def interval_columns(source: Source, named: Sequence[str]) -> list[str]:
    """Return the headings of a day's intervals: those a guide names, or those that read so."""
    if named:
        return list(named)
    return [heading for heading in source.headings if INTERVAL_HEADING.fullmatch(heading)]


def day_step(file: str, n_columns: int, options: ReadingOptions) -> int:
    """Return the interval [min] of so many columns a day.

    Raises
    ------
    IntakeError
        If no day has so many, or `--interval` says another.
    """
    for ordinary, step_min in DAY_COLUMNS.items():
        if n_columns in (ordinary, ordinary + 60 // step_min):
            if options.interval_min not in (None, step_min):
                break
            return step_min
    asked = f" of {options.interval_min} min" if options.interval_min else ""
    raise IntakeError(
        f"{file}: {n_columns} interval columns are not those of a day{asked}; allowed: "
        + ", ".join(f"{n} ({step} min)" for n, step in DAY_COLUMNS.items())
        + ", or an hour's columns more for the 25-hour day."
    )


def take_days(
    source: Source,
    intake: ReadingsIntake,
    id_heading: str,
    columns: Sequence[str],
    quality: QualityCodes,
) -> None:
    """Stream rows of a day into an intake; every cell that is not blank is a reading.

    `intake.options.interval_min` is the length of the columns' intervals. A quality stands for all
    cells of its row.
    """
    select = {
        "id": source.cell_of(id_heading),
        "date": source.cell_of("date"),
        "quality": source.text_of("quality") if source.has("quality") else "NULL",
    }
    select |= Cells.select(
        source, [source.place_of(heading) for heading in columns], intake.rules[0].heading
    )
    days = StampReader(source.name, intake.options.timezone, date_format=intake.options.date_format)
    names, dates, words = KnownTexts(), KnownTexts(), KnownTexts()
    ordinal = 0
    for batch in source.batches(select, max(1, CELLS_A_BATCH // len(columns))):
        rows = np.arange(ordinal, ordinal + len(batch), dtype=np.int64)
        ordinal += len(batch)
        cells = Cells.of(batch, len(columns))
        texts = _Texts(
            names.of(batch.column("id")),
            dates.of(batch.column("date")),
            words.of(batch.column("quality")),
        )
        intake.add(_unfolded(intake, texts, cells, rows, columns, days, id_heading, quality))


@dataclass(frozen=True, slots=True)
class _Texts:
    """The columns of text of a batch."""

    names: Texts
    dates: Texts
    quality: Texts


def _unfolded(
    intake: ReadingsIntake,
    texts: _Texts,
    cells: Cells,
    rows: NDArray[np.int64],
    columns: Sequence[str],
    days: StampReader,
    id_heading: str,
    quality: QualityCodes,
) -> Part:
    """Turn rows of a day into readings, row by row and in the order of the columns."""
    filled = cells.filled

    def refuse(lost: NDArray[np.bool_], column: str, code: str, reason: str) -> None:
        """Refuse all cells of the rows."""
        del column
        refuse_cells(filled & lost[:, np.newaxis], code, reason)

    def refuse_cells(lost: NDArray[np.bool_], code: str, reason: str) -> None:
        for place in np.flatnonzero(lost.any(axis=0)).tolist():
            intake.findings.add(rows[lost[:, place]], columns[place], code, reason)

    good = np.ones(len(rows), dtype=np.bool_)
    series = series_of(intake, texts.names, good, id_heading, refuse)
    dates = texts.dates
    table = days.read_days(dates.distinct)
    refuse_stamps(table, dates.place, good, "date", refuse)
    flags = flags_of(texts.quality, len(rows), quality, good, refuse)
    cells.note_wrong(intake.findings, rows, good, columns)
    kept = filled & ~cells.wrong & good[:, np.newaxis]
    step_s = 60 * (intake.options.interval_min or 60)
    stamp_s = table.first_s[dates.place][:, np.newaxis] + step_s * np.arange(len(columns))
    beyond = kept & (stamp_s >= table.second_s[dates.place][:, np.newaxis])
    refuse_cells(beyond, "date.too_many_hours", "the day has no such hour in this zone")
    future = kept & ~beyond & (stamp_s > days.latest_s)
    refuse_cells(future, "stamp.future", "the hour lies in the future; check the date and the zone")
    kept &= ~beyond & ~future
    row_of, _ = np.nonzero(kept)
    start_s = stamp_s[kept]
    return Part(
        series[row_of],
        start_s,
        start_s,
        cells.number[kept][np.newaxis],
        flags[row_of],
        rows[row_of],
    )
