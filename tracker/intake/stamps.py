"""From the stamps of a file to UTC: each distinct text is read once, with the standard library.

A stamp with an offset is taken as it is; one without is local time in a named zone, where an hour
of spring does not exist and an hour of autumn comes twice.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from tracker.errors import InputError, IntakeError

#: Stands where a stamp could not be read.
NO_STAMP = np.iinfo(np.int64).min

EARLIEST = dt.datetime(1990, 1, 1, tzinfo=dt.UTC)
LATEST = dt.datetime(2200, 1, 1, tzinfo=dt.UTC)


def zone_of(name: str | None) -> ZoneInfo | None:
    """Return the zone of an IANA name; None for None.

    Raises
    ------
    InputError
        If there is no such zone.
    """
    if name is None:
        return None
    try:
        return ZoneInfo(name)
    except (ValueError, OSError, KeyError) as error:
        raise InputError(
            f"timezone = {name!r} is not known; allowed are IANA names such as America/Chicago or UTC."
        ) from error


@dataclass(frozen=True, slots=True)
class StampTable:
    """Distinct stamps, read: all of shape (n_stamp,)."""

    first_s: NDArray[np.int64]  #: the moment [s since 1970, UTC], NO_STAMP where it cannot be read
    second_s: NDArray[
        np.int64
    ]  #: the later of two moments a repeated hour may mean, else `first_s`
    problems: dict[int, tuple[str, str]]  #: place: (code, reason)


class StampReader:
    """Reads stamps and dates; remembers what it has read."""

    def __init__(self, file: str, timezone: ZoneInfo | None) -> None:
        self._file = file
        self._zone = timezone
        self._known: dict[str, tuple[int, int] | tuple[str, str]] = {}

    def read(self, texts: Sequence[str | None]) -> StampTable:
        """Read distinct stamps.

        Raises
        ------
        IntakeError
            If one has no offset and no zone was named.
        """
        return self._table(texts, self._moment)

    def read_days(self, texts: Sequence[str | None]) -> StampTable:
        """Read distinct dates: `first_s` is local midnight, `second_s` the next one."""
        return self._table(texts, self._day)

    def _table(
        self,
        texts: Sequence[str | None],
        reader: Callable[[str], tuple[int, int] | tuple[str, str]],
    ) -> StampTable:
        first = np.full(len(texts), NO_STAMP, dtype=np.int64)
        second = np.full(len(texts), NO_STAMP, dtype=np.int64)
        problems: dict[int, tuple[str, str]] = {}
        for place, text in enumerate(texts):
            known: tuple[int, int] | tuple[str, str]
            if text is None:
                known = _BLANK
            elif text in self._known:
                known = self._known[text]
            else:
                known = self._known[text] = reader(text)
            if isinstance(known[0], str):
                problems[place] = (known[0], str(known[1]))
            else:
                first[place], second[place] = known
        return StampTable(first, second, problems)

    def _moment(self, text: str) -> tuple[int, int] | tuple[str, str]:
        try:
            stamp = dt.datetime.fromisoformat(text)
        except ValueError:
            return (
                "stamp.unreadable",
                f"{text!r} is no ISO 8601 date and time such as 2025-07-01T17:00:00-05:00",
            )
        if len(text) <= len("2025-07-01"):
            return "stamp.unreadable", f"{text!r} is a date without a time of day"
        if stamp.tzinfo is None:
            if self._zone is None:
                raise IntakeError(
                    f"{self._file}: stamp {text!r} has no offset, so it is local time: "
                    "name its zone with --timezone (IANA name, for instance America/Chicago)."
                )
            return self._local(text, stamp)
        return _in_range(text, stamp, stamp)

    def _local(self, text: str, stamp: dt.datetime) -> tuple[int, int] | tuple[str, str]:
        first = stamp.replace(tzinfo=self._zone, fold=0)
        second = stamp.replace(tzinfo=self._zone, fold=1)
        there_and_back = first.astimezone(dt.UTC).astimezone(self._zone).replace(tzinfo=None)
        if there_and_back != stamp:
            return (
                "stamp.no_such_hour",
                f"{text!r} does not exist in {self._zone}: the clocks were put forward over it",
            )
        return _in_range(text, first, second)

    def _day(self, text: str) -> tuple[int, int] | tuple[str, str]:
        if self._zone is None:
            raise IntakeError(
                f"{self._file}: a date such as {text!r} begins at local midnight: "
                "name its zone with --timezone (IANA name, for instance America/Chicago)."
            )
        try:
            day = dt.date.fromisoformat(text)
        except ValueError:
            return "date.unreadable", f"{text!r} is no ISO 8601 date such as 2025-07-01"
        midnight = dt.datetime.combine(day, dt.time(), tzinfo=self._zone)
        try:
            following = dt.datetime.combine(
                day + dt.timedelta(days=1), dt.time(), tzinfo=self._zone
            )
        except OverflowError:
            following = midnight
        return _in_range(text, midnight, following)


_BLANK: tuple[str, str] = ("stamp.blank", "the time of the reading is blank")


def _in_range(
    text: str, first: dt.datetime, second: dt.datetime
) -> tuple[int, int] | tuple[str, str]:
    try:
        seconds = first.timestamp(), second.timestamp()
        in_range = EARLIEST.timestamp() <= seconds[0] < LATEST.timestamp()
    except (OverflowError, ValueError):
        in_range = False
    if not in_range:
        return (
            "stamp.out_of_range",
            f"{text!r} lies outside {EARLIEST:%Y} to {LATEST:%Y}; check the year",
        )
    if seconds[0] % 1 or seconds[1] % 1:
        return "stamp.off_grid", f"{text!r} has a fraction of a second"
    return int(seconds[0]), int(seconds[1])


def day_start(text: str, zone: ZoneInfo | None) -> dt.datetime | None:
    """Return the beginning of a day, local in `zone` or else UTC; None when the text is no date."""
    try:
        day = dt.date.fromisoformat(text)
    except ValueError:
        return None
    return dt.datetime.combine(day, dt.time(), tzinfo=zone or dt.UTC)
