"""Columns of a batch of rows: what they mean, and which rows cannot be taken."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from tracker.intake.quality import MISSING, QualityCodes
from tracker.intake.readings import ReadingsIntake
from tracker.intake.report import Findings
from tracker.intake.rows import Source
from tracker.intake.stamps import NO_STAMP, StampTable
from tracker.intake.texts import KnownTexts, Texts
from tracker.store.blocks import Quality
from tracker.store.models import ID_LENGTH


def numbers_of(column: pa.Array) -> NDArray[np.float64]:
    """Return a column of numbers, NaN where there is none."""
    # A copy: arrays that may not be written to are another type to the compiler.
    return np.array(pc.fill_null(column, np.nan).to_numpy(zero_copy_only=False))


#: Called with a mask of rows that cannot be taken, the column, a code and a reason.
Refuse = Callable[[NDArray[np.bool_], str, str, str], None]


def series_of(
    intake: ReadingsIntake, names: Texts, good: NDArray[np.bool_], heading: str, refuse: Refuse
) -> NDArray[np.int32]:
    """Return the place of each row's series; rows without a usable id are refused.

    `good` says which rows are still in play, and loses those refused.
    """
    series = intake.places_of(names.distinct)[names.place]
    lost = good & (series < 0)
    for place in np.unique(names.place[lost]).tolist():
        code, reason = (
            ("id.blank", f"{heading} is blank")
            if names.distinct[place] is None
            else ("id.too_long", f"{heading} is longer than {ID_LENGTH} characters")
        )
        refuse(lost & (names.place == place), heading, code, reason)
    good &= ~lost
    return series


def refuse_stamps(
    table: StampTable,
    places: NDArray[np.int32],
    good: NDArray[np.bool_],
    heading: str,
    refuse: Refuse,
) -> None:
    """Refuse rows whose stamp could not be read."""
    if not table.problems:
        return
    lost = good & (table.first_s == NO_STAMP)[places]
    for place in np.unique(places[lost]).tolist():
        refuse(lost & (places == place), heading, *table.problems[place])
    good &= ~lost


def flags_of(
    words: Texts | None,
    n_row: int,
    codes: QualityCodes,
    good: NDArray[np.bool_],
    refuse: Refuse,
) -> NDArray[np.uint8]:
    """Return the quality flags of each row; rows marked missing, or by no known code, are refused."""
    flags = np.full(n_row, Quality.HELD, dtype=np.uint8)
    if words is None:
        return flags
    for place, word in enumerate(words.distinct):
        if word is None:
            continue
        here = words.place == place
        meaning = codes.meaning(word)
        if meaning is not None and meaning != MISSING:
            flags[here] = meaning
            continue
        lost = good & here
        code, reason = (
            ("quality.missing", "the reading is marked as missing")
            if meaning == MISSING
            else ("quality.unknown", f"quality {word!r} is not known; allowed: {codes.allowed}")
        )
        refuse(lost, "quality", code, reason)
        good &= ~lost
    return flags


def refuse_texts(texts: pa.Array, good: NDArray[np.bool_], heading: str, refuse: Refuse) -> None:
    """Refuse rows in whose cell stands a text that is no number; `texts` is NULL elsewhere."""
    if texts.null_count == len(texts):
        return
    wrong = KnownTexts().of(texts)
    for place, text in enumerate(wrong.distinct):
        lost = good & (wrong.place == place)
        if text is not None and lost.any():
            refuse(lost, heading, *not_a_number(heading, text))
            good &= ~lost


@dataclass(frozen=True, slots=True)
class Cells:
    """Many columns of numbers, a row of cells each; arrays of shape (n_row, n_column)."""

    number: NDArray[np.float64]  #: NaN where there is none
    wrong: NDArray[np.bool_]  #: whether a text stands where a number should
    _texts: pa.Array  #: of all cells, row by row

    @staticmethod
    def select(source: Source, places: Sequence[int], heading: str) -> dict[str, str]:
        """Return the columns to ask a source for; `heading` says in which unit the numbers are."""
        return {"texts": source.cells_at(places), "numbers": source.numbers_at(places, heading)}

    @classmethod
    def of(cls, batch: pa.RecordBatch, n_column: int) -> Cells:
        """Take the cells of a batch."""
        shape = (len(batch), n_column)
        number = numbers_of(batch.column("numbers").flatten()).reshape(shape)
        texts = batch.column("texts").flatten()
        blank = pc.fill_null(pc.equal(pc.utf8_trim_whitespace(texts), ""), True)
        wrong = np.isnan(number) & ~blank.to_numpy(zero_copy_only=False).reshape(shape)
        return cls(number, wrong, texts)

    @property
    def filled(self) -> NDArray[np.bool_]:
        """Whether a cell is not blank, so that it has a fate."""
        return self.wrong | ~np.isnan(self.number)

    def note_wrong(
        self,
        findings: Findings,
        rows: NDArray[np.int64],
        good: NDArray[np.bool_],
        headings: Sequence[str],
    ) -> None:
        """Refuse the cells that hold no number, of the rows that are good otherwise."""
        found: dict[tuple[int, str], list[int]] = {}
        for row, column in np.argwhere(self.wrong & good[:, np.newaxis]).tolist():
            text = self._texts[row * len(headings) + column].as_py().strip()[:40]
            found.setdefault((column, text), []).append(int(rows[row]))
        for (column, text), ordinals in found.items():
            findings.add(ordinals, headings[column], *not_a_number(headings[column], text))

    def text_only(self) -> tuple[int, str] | None:
        """Return the first column that holds texts and no number at all, and one of its texts."""
        texts = self.wrong.any(axis=0) & np.isnan(self.number).all(axis=0)
        for column in np.flatnonzero(texts).tolist():
            row = int(np.flatnonzero(self.wrong[:, column])[0])
            return column, self._texts[row * self.number.shape[1] + column].as_py().strip()
        return None


def not_a_number(heading: str, text: str) -> tuple[str, str]:
    """Return code and reason of a cell that is no number."""
    return (
        "value.not_a_number",
        f"{heading} = {text[:40]!r} is no finite number such as 1.25",
    )
