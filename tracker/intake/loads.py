"""Interval readings: the layouts of a loads file, told apart by their headings."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.errors import IntakeError
from tracker.intake.ahead import ahead
from tracker.intake.readings import (
    MISSING_WORD,
    QUALITY_WORDS,
    Part,
    QuantityRule,
    ReadingOptions,
    ReadingsIntake,
)
from tracker.intake.report import FileReport
from tracker.intake.site_load import derive
from tracker.intake.source import Source
from tracker.intake.stamps import StampReader, StampTable
from tracker.settings import DEFAULT_POWER_FACTOR
from tracker.store.blocks import Quality
from tracker.store.models import ID_LENGTH

#: Value columns of a loads file, the one that says most first.
QUANTITIES = {
    "kva": QuantityRule("kva", "kva", lowest=0.0, unit="kVA"),
    "kw": QuantityRule("kw", "kw"),
    "kwh": QuantityRule("kwh", "kw", energy=True, unit="kWh"),
}

#: Headings of the id columns, and the kind of series each names.
ID_HEADINGS = {"meter_id": "meter", "unit_id": "unit"}

#: A heading that names an interval of the day: h01 to h25, or a time of day.
INTERVAL_HEADING = re.compile(r"h\d{1,3}|\d{1,2}:\d{2}(:\d{2})?", re.IGNORECASE)

#: Interval columns of an ordinary day: interval length [min]. A day that has an hour more brings
#: that hour's columns, blank on other days.
DAY_COLUMNS = {24: 60, 48: 30, 72: 20, 96: 15, 144: 10, 288: 5}

#: Batches decoded ahead while readings are merged; about one chunk of readings.
BATCHES_AHEAD = 16

LAYOUTS = (
    "meter_id (or unit_id), read_at and kwh, kw or kva; "
    "or meter_id (or unit_id), date and a column an interval (h01 to h24, or 00:00, 00:15 …)"
)


def take_loads(
    connection: Connection,
    source: Source,
    file_key: int,
    options: ReadingOptions,
    quantity: str | None = None,
) -> FileReport:
    """Take the readings of one file into the store, and derive the load of the sites they touch.

    Parameters
    ----------
    file_key : int
        The file's entry in the intake ledger.
    quantity : str, optional
        What the cells of the layout with one row a day are; `kwh` unless said.

    Raises
    ------
    IntakeError
        If the headings are of no layout, or the file cannot be read to its end.
    InputError
        If an option does not fit the file.
    """
    ids = [heading for heading in ID_HEADINGS if source.has(heading)]
    if len(ids) == 1 and source.has("read_at"):
        intake, used = _take_long(connection, source, file_key, options, ids[0], quantity)
    elif len(ids) == 1 and source.has("date"):
        intake, used = _take_days(connection, source, file_key, options, ids[0], quantity)
    else:
        found = ", ".join(source.headings[:12])
        raise IntakeError(f"{source.name}: headings {found} are of no layout; allowed: {LAYOUTS}.")
    intake.finish()
    derive(connection, intake.touched)
    return FileReport(
        source.name,
        "loads",
        intake.fates,
        source.refusals(intake.findings),
        source.left_out(used),
        _notes(intake),
    )


def _notes(intake: ReadingsIntake) -> list[str]:
    steps = ", ".join(str(step) for step in sorted(intake.steps_found))
    notes = [f"{len(intake.names):,} {intake.kind}s"]
    if steps:
        notes.append(f"intervals of {steps} min")
    if intake.rule.stored_as == "kw":
        given = intake.options.power_factor
        notes.append(
            f"kVA from {intake.rule.heading} by power factor {given:g}"
            if given
            else f"kVA from {intake.rule.heading} by the assumed power factor {DEFAULT_POWER_FACTOR:g}"
        )
    return notes


def _rule(quantity: str | None) -> QuantityRule:
    name = (quantity or "kwh").lower()
    if name not in QUANTITIES:
        raise IntakeError(f"quantity = {name!r} is not known; allowed: {', '.join(QUANTITIES)}.")
    return QUANTITIES[name]


# --- Long: one reading a row ----------------------------------------------------------------------


def _take_long(
    connection: Connection,
    source: Source,
    file_key: int,
    options: ReadingOptions,
    id_heading: str,
    quantity: str | None,
) -> tuple[ReadingsIntake, Sequence[str]]:
    present = [heading for heading in QUANTITIES if source.has(heading)]
    if quantity is not None:
        present = [heading for heading in present if heading == _rule(quantity).heading]
    if not present:
        raise IntakeError(
            f"{source.name}: no column of values; allowed headings: {', '.join(QUANTITIES)}."
        )
    rule = QUANTITIES[present[0]]
    kind = ID_HEADINGS[id_heading]
    intake = ReadingsIntake(connection, source.name, file_key, kind, rule, options)
    value = f"TRY_CAST({source.cell_of(rule.heading)} AS DOUBLE)"
    take_long(source, intake, id_heading, value)
    return intake, (id_heading, "read_at", rule.heading, "quality")


def take_long(source: Source, intake: ReadingsIntake, id_heading: str | None, value: str) -> None:
    """Stream rows of id, stamp, value and quality into an intake.

    Parameters
    ----------
    id_heading : str or None
        None when all rows are of one series, called "".
    value : str
        SQL expression of the value, NULL where it is no number.
    """
    heading = intake.rule.heading
    select = {
        "id": source.cell_of(id_heading) if id_heading else "''",
        "stamp": source.cell_of("read_at"),
        "value": value,
        "bad": f"CASE WHEN isfinite({value}) THEN NULL ELSE coalesce({source.cell_of(heading)}, '') END",
        "quality": source.text_of("quality") if source.has("quality") else "NULL",
    }
    stamps = StampReader(source.name, intake.options.timezone)
    ordinal = 0
    decoded = (_decoded(batch, stamps) for batch in source.batches(select))
    for batch in ahead(decoded, BATCHES_AHEAD):
        rows = np.arange(ordinal, ordinal + len(batch.value), dtype=np.int64)
        ordinal += len(rows)
        good = np.ones(len(rows), dtype=np.bool_)
        series = _series(intake, batch.names, rows, good, id_heading)
        _refuse_stamps(intake, batch.stamps, batch.stamp_of, rows, good, "read_at")
        flags = _flags(intake, batch.quality, rows, good)
        _refuse_values(intake, batch.not_numbers, rows, good)
        part = Part(series, batch.first_s, batch.second_s, batch.value, flags, rows)
        intake.add(part.where(good))


@dataclass(frozen=True, slots=True)
class _Texts:
    """A column of text: its distinct texts, trimmed, None last, and the place of each row's."""

    distinct: list[str | None]
    place: NDArray[np.int32]


@dataclass(frozen=True, slots=True)
class _Batch:
    """Rows of the long layout, their columns decoded."""

    names: _Texts
    stamps: StampTable  #: of the distinct stamps
    stamp_of: NDArray[np.int32]  #: place of each row's stamp among them
    first_s: NDArray[np.int64]
    second_s: NDArray[np.int64]  #: `first_s` itself where no stamp means two moments
    value: NDArray[np.float64]
    not_numbers: dict[int, str]  #: what stands where a number should, by row
    quality: _Texts | None


def _decoded(batch: pa.RecordBatch, stamps: StampReader) -> _Batch:
    """Decode a batch; done ahead of the rest of the work, in a thread of its own."""
    bad = batch.column("bad")
    wrong = np.flatnonzero(bad.is_valid().to_numpy(zero_copy_only=False)).tolist()
    quality = batch.column("quality")
    stamp = _texts(batch.column("stamp"))
    table = stamps.read(stamp.distinct)
    first_s = table.first_s[stamp.place]
    twice = (table.first_s != table.second_s).any()
    return _Batch(
        _texts(batch.column("id")),
        table,
        stamp.place,
        first_s,
        table.second_s[stamp.place] if twice else first_s,
        # A copy: arrays that may not be written to are another type to the compiler.
        np.array(pc.fill_null(batch.column("value"), np.nan).to_numpy(zero_copy_only=False)),
        {row: bad[row].as_py() for row in wrong},
        None if quality.null_count == len(quality) else _texts(quality),
    )


def _texts(column: pa.Array) -> _Texts:
    encoded = column.dictionary_encode()
    texts: list[str | None] = [text.strip() or None for text in encoded.dictionary.to_pylist()]
    places = pc.fill_null(encoded.indices, len(texts)).to_numpy(zero_copy_only=False)
    return _Texts([*texts, None], places)


def _series(
    intake: ReadingsIntake,
    names: _Texts,
    rows: NDArray[np.int64],
    good: NDArray[np.bool_],
    id_heading: str | None,
) -> NDArray[np.int32]:
    if id_heading is None:
        return np.full(len(rows), intake.place_of(""), dtype=np.int32)
    codes = np.full(len(names.distinct), -1, dtype=np.int32)
    for place, name in enumerate(names.distinct):
        if name is not None and len(name) <= ID_LENGTH:
            codes[place] = intake.place_of(name)
    for place in np.flatnonzero(codes < 0).tolist():
        lost = good & (names.place == place)
        if lost.any():
            code, reason = (
                ("id.blank", f"{id_heading} is blank")
                if names.distinct[place] is None
                else ("id.too_long", f"{id_heading} is longer than {ID_LENGTH} characters")
            )
            intake.refuse(rows[lost], id_heading, code, reason)
            good &= ~lost
    return codes[names.place]


def _refuse_stamps(
    intake: ReadingsIntake,
    table: StampTable,
    places: NDArray[np.int32],
    rows: NDArray[np.int64],
    good: NDArray[np.bool_],
    heading: str,
) -> None:
    for place, (code, reason) in table.problems.items():
        lost = good & (places == place)
        if lost.any():
            intake.refuse(rows[lost], heading, code, reason)
            good &= ~lost


def _flags(
    intake: ReadingsIntake,
    words: _Texts | None,
    rows: NDArray[np.int64],
    good: NDArray[np.bool_],
) -> NDArray[np.uint8]:
    flags = np.full(len(rows), Quality.HELD, dtype=np.uint8)
    for place, word in enumerate(words.distinct if words else ()):
        if word is None or words is None:
            continue
        here = words.place == place
        quality = QUALITY_WORDS.get(word.casefold())
        if quality is not None:
            flags[here] = quality
            continue
        lost = good & here
        code, reason = (
            ("quality.missing", "the reading is marked as missing")
            if word.casefold() == MISSING_WORD
            else (
                "quality.unknown",
                f"quality {word!r} is not known; allowed: measured, estimated, missing",
            )
        )
        intake.refuse(rows[lost], "quality", code, reason)
        good &= ~lost
    return flags


def _refuse_values(
    intake: ReadingsIntake,
    not_numbers: Mapping[int, str],
    rows: NDArray[np.int64],
    good: NDArray[np.bool_],
) -> None:
    heading = intake.rule.heading
    for row, text in not_numbers.items():
        if good[row]:
            intake.refuse([rows[row]], heading, *_why_no_number(heading, text))
            good[row] = False


def _why_no_number(heading: str, text: str) -> tuple[str, str]:
    if not text.strip():
        return "value.blank", f"{heading} is blank"
    return (
        "value.not_a_number",
        f"{heading} = {text.strip()[:40]!r} is no finite number such as 1.25",
    )


# --- One row a day --------------------------------------------------------------------------------


def _take_days(
    connection: Connection,
    source: Source,
    file_key: int,
    options: ReadingOptions,
    id_heading: str,
    quantity: str | None,
) -> tuple[ReadingsIntake, Sequence[str]]:
    rule = _rule(quantity)
    columns = [heading for heading in source.headings if INTERVAL_HEADING.fullmatch(heading)]
    step_min = _day_step(source.name, len(columns), options)
    kind = ID_HEADINGS[id_heading]
    options = ReadingOptions(options.timezone, False, step_min, options.power_factor)
    intake = ReadingsIntake(connection, source.name, file_key, kind, rule, options)
    days = StampReader(source.name, options.timezone)
    select = {"id": source.cell_of(id_heading), "date": source.cell_of("date")}
    for place, heading in enumerate(columns):
        cell = source.text_of(heading)
        select[f"text{place}"] = (
            f"CASE WHEN isfinite(TRY_CAST({cell} AS DOUBLE)) THEN NULL ELSE {cell} END"
        )
        select[f"value{place}"] = f"TRY_CAST({cell} AS DOUBLE)"
    ordinal = 0
    for batch in source.batches(select):
        rows = np.arange(ordinal, ordinal + len(batch), dtype=np.int64)
        ordinal += len(batch)
        for part in _unfolded(intake, batch, rows, columns, days, id_heading, step_min):
            intake.add(part)
    return intake, (id_heading, "date", *columns)


def _day_step(file: str, n_columns: int, options: ReadingOptions) -> int:
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


def _unfolded(
    intake: ReadingsIntake,
    batch: pa.RecordBatch,
    rows: NDArray[np.int64],
    columns: Sequence[str],
    days: StampReader,
    id_heading: str,
    step_min: int,
) -> Iterator[Part]:
    """Turn rows of a day into readings, row by row and in the order of the columns."""
    good = np.ones(len(rows), dtype=np.bool_)
    cells = np.column_stack(
        [
            pc.fill_null(batch.column(f"value{place}"), np.nan).to_numpy(zero_copy_only=False)
            for place in range(len(columns))
        ]
    )
    texts = [batch.column(f"text{place}") for place in range(len(columns))]
    bad = np.column_stack([text.is_valid().to_numpy(zero_copy_only=False) for text in texts])
    filled = np.isfinite(cells) | bad
    series = _series_of_days(intake, batch.column("id"), rows, good, filled, columns, id_heading)
    dates = _texts(batch.column("date"))
    places = dates.place
    table = days.read_days(dates.distinct)
    for place, (code, reason) in table.problems.items():
        lost = good & (places == place)
        _refuse_cells(intake, rows, filled & lost[:, np.newaxis], columns, code, reason)
        good &= ~lost
    for row, column in np.argwhere(bad & good[:, np.newaxis]).tolist():
        heading = columns[column]
        why = _why_no_number(heading, texts[column][row].as_py())
        intake.refuse([rows[row]], heading, *why)
    start_s = np.where(good, table.first_s[places], 0)
    end_s = np.where(good, table.second_s[places], 0)
    stamp_s = start_s[:, np.newaxis] + 60 * step_min * np.arange(len(columns), dtype=np.int64)
    beyond = (stamp_s >= end_s[:, np.newaxis]) & filled & ~bad & good[:, np.newaxis]
    _refuse_cells(
        intake,
        rows,
        beyond,
        columns,
        "date.too_many_hours",
        "the day has no such hour in this zone",
    )
    kept = filled & ~bad & ~beyond & good[:, np.newaxis]
    row_of, _ = np.nonzero(kept)
    start_s = stamp_s[kept]
    yield Part(
        series[row_of],
        start_s,
        start_s,
        cells[kept],
        np.full(len(row_of), Quality.HELD, dtype=np.uint8),
        rows[row_of],
    )


def _series_of_days(
    intake: ReadingsIntake,
    column: pa.Array,
    rows: NDArray[np.int64],
    good: NDArray[np.bool_],
    filled: NDArray[np.bool_],
    columns: Sequence[str],
    id_heading: str,
) -> NDArray[np.int32]:
    names = _texts(column)
    codes = np.array(
        [
            intake.place_of(name) if name is not None and len(name) <= ID_LENGTH else -1
            for name in names.distinct
        ],
        dtype=np.int32,
    )
    series = codes[names.place]
    lost = series < 0
    _refuse_cells(
        intake,
        rows,
        filled & lost[:, np.newaxis],
        columns,
        "id.unusable",
        f"{id_heading} is blank or longer than {ID_LENGTH} characters",
    )
    good &= ~lost
    return series


def _refuse_cells(
    intake: ReadingsIntake,
    rows: NDArray[np.int64],
    cells: NDArray[np.bool_],
    columns: Sequence[str],
    code: str,
    reason: str,
) -> None:
    for row, column in np.argwhere(cells).tolist():
        intake.refuse([rows[row]], columns[column], code, reason)
