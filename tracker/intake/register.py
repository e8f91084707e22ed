"""Register files: one row a thing, columns with known meanings, checked column by column."""

from __future__ import annotations

import datetime as dt
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import pandas as pd

from tracker.errors import IntakeError
from tracker.intake.report import Finding
from tracker.intake.source import Source
from tracker.store.models import ID_LENGTH


@dataclass(frozen=True, slots=True)
class Column:
    """What may stand under a heading."""

    heading: str
    kind: Literal["text", "number", "whole", "date"] = "text"
    low: float = -np.inf  #: smallest number allowed
    high: float = np.inf  #: largest number allowed
    above: float | None = None  #: numbers must lie above this one
    choices: tuple[str, ...] = ()  #: allowed words, as they are kept
    numbers: tuple[float, ...] = ()  #: allowed numbers
    required: bool = False

    @property
    def is_number(self) -> bool:
        """Whether its cells hold numbers."""
        return self.kind in ("number", "whole")

    @property
    def allowed(self) -> str:
        """What is allowed, in words."""
        if self.choices:
            return ", ".join(self.choices)
        if self.numbers:
            return " or ".join(f"{number:g}" for number in self.numbers)
        if self.above is not None:
            return f"above {self.above:g}" + (
                f", up to {self.high:g}" if self.high < np.inf else ""
            )
        if self.low > -np.inf or self.high < np.inf:
            return f"{self.low:g} to {self.high:g}"
        return {"text": "text", "number": "a number", "whole": "a whole number"}.get(
            self.kind, "a date such as 2025-07-01"
        )


@dataclass(frozen=True, slots=True)
class RegisterRows:
    """Checked rows: `frame` holds the good ones, their ordinals as index; None is blank."""

    frame: pd.DataFrame
    findings: list[Finding]


def read_register(source: Source, columns: Sequence[Column]) -> RegisterRows:
    """Read a register file and check every cell; a row with a bad cell is refused for its first one.

    Raises
    ------
    IntakeError
        If a required heading is missing, or the file cannot be read to its end.
    """
    missing = [
        column.heading + source.said_of(column.heading)
        for column in columns
        if column.required and not source.has(column.heading)
    ]
    if missing:
        raise IntakeError(
            f"{source.name}: heading {', '.join(missing)} is missing; "
            f"found {', '.join(source.headings[:30])}."
        )
    present = [column for column in columns if source.has(column.heading)]
    select = {column.heading: source.text_of(column.heading) for column in present}
    select |= {
        f"number_{column.heading}": source.number_of(column.heading)
        for column in present
        if column.is_number
    }
    texts = source.frame(select)
    good = pd.Series(True, index=texts.index)
    findings: list[Finding] = []
    checked: dict[str, pd.Series] = {}
    for column in present:
        text = texts[column.heading].astype(object).where(texts[column.heading].notna(), None)
        numbers = texts[f"number_{column.heading}"] if column.is_number else None
        values, problems = _checked(column, text, numbers, source.guide.readings.date_format)
        for ordinal, (code, reason) in problems.items():
            if good[ordinal]:
                findings.append(Finding(ordinal, column.heading, code, reason))
                good[ordinal] = False
        checked[column.heading] = values
    for column in columns:
        if column.heading not in checked:
            checked[column.heading] = pd.Series(None, index=texts.index, dtype=object)
    frame = pd.DataFrame(checked, dtype=object)[good]
    return RegisterRows(frame.where(frame.notna(), None), findings)


def _checked(
    column: Column, text: pd.Series, numbers: pd.Series | None, date_format: str | None
) -> tuple[pd.Series, dict[int, tuple[str, str]]]:
    """Return the values of a column, and what is wrong by ordinal."""
    problems: dict[int, tuple[str, str]] = {}
    given = text.notna()
    if column.required:
        for ordinal in text.index[~given]:
            problems[ordinal] = (f"{column.heading}.blank", f"{column.heading} is blank")
    if numbers is not None:
        values, wrong, code = _numbers(column, numbers.astype(float), given)
    elif column.kind == "date":
        values = text.map(lambda word: _iso_date(word, date_format), na_action="ignore")
        wrong, code = given & values.isna(), "no_date"
    elif column.choices:
        folded = {choice.casefold(): choice for choice in column.choices}
        values = text.map(lambda word: folded.get(word.casefold()), na_action="ignore")
        wrong, code = given & values.isna(), "unknown"
    else:
        values, wrong, code = text, given & (text.str.len() > ID_LENGTH), "too_long"
    for ordinal in text.index[wrong.to_numpy(dtype=bool)]:
        problems[ordinal] = (
            f"{column.heading}.{code}",
            f"{column.heading} = {str(text[ordinal])[:60]!r} is not allowed; allowed: {column.allowed}",
        )
    return values.where(values.notna(), None), problems


def _numbers(
    column: Column, numbers: pd.Series, given: pd.Series
) -> tuple[pd.Series, pd.Series, str]:
    fits = np.isfinite(numbers) & (numbers >= column.low) & (numbers <= column.high)
    if column.above is not None:
        fits &= numbers > column.above
    if column.kind == "whole":
        fits &= numbers % 1 == 0
    if column.numbers:
        fits &= numbers.isin(column.numbers)
    values = numbers.astype(object)
    if column.kind == "whole":
        values = values.where(~fits, numbers.where(fits, 0).astype(int).astype(object))
    return values.where(given, None), given & ~fits, "not_allowed"


def _iso_date(text: str, date_format: str | None) -> str | None:
    """Return a date as ISO 8601 writes it; None when the text is none."""
    try:
        if date_format is not None:
            return dt.datetime.strptime(text, date_format).date().isoformat()
        return dt.date.fromisoformat(text).isoformat() if len(text) == len("2025-07-01") else None
    except ValueError:
        return None
