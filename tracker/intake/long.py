"""The long layout: one reading a row, of one or several quantities."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from tracker.intake.ahead import ahead
from tracker.intake.chunk import Part
from tracker.intake.columns import (
    flags_of,
    refuse_stamps,
    refuse_texts,
    series_of,
)
from tracker.intake.quality import QualityCodes
from tracker.intake.readings import QuantityRule, ReadingsIntake
from tracker.intake.source import Source
from tracker.intake.stamps import StampReader, StampTable
from tracker.intake.texts import KnownTexts, Texts

#: Batches decoded ahead while readings are merged; about one chunk of readings.
BATCHES_AHEAD = 16


def take_long(
    source: Source, intake: ReadingsIntake, id_heading: str | None, quality: QualityCodes
) -> None:
    """Stream rows of id, stamp, values and quality into an intake.

    Parameters
    ----------
    id_heading : str or None
        None when all rows are of one series, called "".
    """
    select = {
        "id": source.cell_of(id_heading) if id_heading else "''",
        "stamp": source.cell_of("read_at"),
        "quality": source.text_of("quality") if source.has("quality") else "NULL",
    }
    for place, rule in enumerate(intake.rules):
        number = source.number_of(rule.heading)
        select[f"value{place}"] = number
        select[f"wrong{place}"] = (
            f"CASE WHEN {number} IS NULL THEN {source.text_of(rule.heading)} END"
        )
    stamps = StampReader(
        source.name, intake.options.timezone, stamp_format=intake.options.stamp_format
    )
    known = _Known(stamps, KnownTexts(), KnownTexts(), KnownTexts())
    decoded = (_decoded(batch, intake.rules, known) for batch in source.batches(select))
    ordinal = 0
    for batch in ahead(decoded, BATCHES_AHEAD):
        rows = np.arange(ordinal, ordinal + len(batch.first_s), dtype=np.int64)
        ordinal += len(rows)
        intake.add(_part(intake, batch, rows, id_heading, quality))


@dataclass(frozen=True, slots=True)
class _Known:
    """What is remembered from batch to batch."""

    reader: StampReader
    names: KnownTexts
    stamps: KnownTexts
    quality: KnownTexts


@dataclass(frozen=True, slots=True)
class _Batch:
    """Rows of the long layout, their columns decoded."""

    names: Texts
    stamps: StampTable  #: of the distinct stamps
    stamp_of: NDArray[np.int32]  #: place of each row's stamp among them
    first_s: NDArray[np.int64]
    second_s: NDArray[np.int64]  #: `first_s` itself where no stamp means two moments
    values: NDArray[np.float64]  #: shape (n_rule, n_row)
    wrong: Sequence[pa.Array]  #: what stands where a number should; NULL elsewhere; one a rule
    quality: Texts | None


def _decoded(batch: pa.RecordBatch, rules: Sequence[QuantityRule], known: _Known) -> _Batch:
    """Decode a batch; done ahead of the rest of the work, in a thread of its own."""
    quality = batch.column("quality")
    stamp = known.stamps.of(batch.column("stamp"))
    table = known.reader.read(stamp.distinct)
    first_s = table.first_s[stamp.place]
    twice = (table.first_s != table.second_s).any()
    return _Batch(
        known.names.of(batch.column("id")),
        table,
        stamp.place,
        first_s,
        table.second_s[stamp.place] if twice else first_s,
        np.stack(
            [
                batch.column(f"value{place}").to_numpy(zero_copy_only=False)
                for place in range(len(rules))
            ]
        ),
        [batch.column(f"wrong{place}") for place in range(len(rules))],
        None if quality.null_count == len(quality) else known.quality.of(quality),
    )


def _part(
    intake: ReadingsIntake,
    batch: _Batch,
    rows: NDArray[np.int64],
    id_heading: str | None,
    quality: QualityCodes,
) -> Part:
    """Return the readings of a batch; what cannot be taken is noted as findings."""

    def refuse(lost: NDArray[np.bool_], column: str, code: str, reason: str) -> None:
        intake.findings.add(rows[lost], column, code, reason)

    good = np.ones(len(rows), dtype=np.bool_)
    if id_heading is None:
        series = np.full(len(rows), intake.place_of(""), dtype=np.int32)
    else:
        series = series_of(intake, batch.names, good, id_heading, refuse)
    refuse_stamps(batch.stamps, batch.stamp_of, good, "read_at", refuse)
    flags = flags_of(batch.quality, len(rows), quality, good, refuse)
    for rule, wrong in zip(intake.rules, batch.wrong, strict=True):
        refuse_texts(wrong, good, rule.heading, refuse)
    values = _without_doubles(batch.values, intake.rules)
    blank = good & np.isnan(values).all(axis=0)
    if blank.any():
        headings = " and ".join(rule.heading for rule in intake.rules)
        refuse(blank, intake.rules[0].heading, "value.blank", f"{headings} is blank")
        good &= ~blank
    if batch.stamps.snapped.any():
        intake.snapped += int(batch.stamps.snapped[batch.stamp_of[good]].sum())
    return Part(series, batch.first_s, batch.second_s, values, flags, rows).where(good)


def _without_doubles(
    values: NDArray[np.float64], rules: Sequence[QuantityRule]
) -> NDArray[np.float64]:
    """Blank what another column says already: energy beside the mean power of the same interval."""
    for place, rule in enumerate(rules):
        for earlier in range(place):
            if rules[earlier].stored_as == rule.stored_as:
                values[place, ~np.isnan(values[earlier])] = np.nan
    return values
