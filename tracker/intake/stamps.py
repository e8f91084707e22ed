"""From the stamps of a file to UTC: each distinct text is read once, with the standard library.

A stamp with an offset is taken as it is; one without is local time in a named zone, where an hour
of spring does not exist and an hour of autumn comes twice. Clocks of meters run a little off, so a
stamp up to a minute beside a multiple of five minutes is set to it.
"""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from tracker.errors import InputError, IntakeError

#: Stands where a stamp could not be read.
NO_STAMP = np.iinfo(np.int64).min

EARLIEST = dt.datetime(1990, 1, 1, tzinfo=dt.UTC)

#: How far in the future a stamp may lie: the interval under way, and clocks that are fast.
AHEAD_OF_NOW = dt.timedelta(hours=1)

#: The smallest grid that intervals begin on, and how far beside it a stamp may lie [s].
GRID_S = 300
SNAPPED_S = 60

#: Midnight at the end of a day, as some systems write it: date, separator, the rest.
END_OF_DAY = re.compile(r"(\d{4}-?\d{2}-?\d{2})([T ])24(:?00(:?00(?:\.0+)?)?)?(?=$|[Zz+-])")


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
    snapped: NDArray[np.bool_]  #: whether it was a little off, and set right
    problems: dict[int, tuple[str, str]]  #: place: (code, reason)


#: Two moments [s since 1970, UTC] and whether they were snapped; or a code and a reason.
_Read = tuple[int, int, bool] | tuple[str, str]


_UNREAD = (NO_STAMP, NO_STAMP, False)
_NO_STAMPS = StampTable(
    np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64), np.empty(0, dtype=np.bool_), {}
)


class StampReader:
    """Reads stamps and dates.

    Parameters
    ----------
    file : str
        Name of the file, for messages.
    timezone : ZoneInfo or None
        Zone of stamps without an offset.
    stamp_format, date_format : str, optional
        How they are written, as `datetime.strptime` takes it; ISO 8601 unless said.
    now : datetime, optional
        The present; stamps after it are refused.
    """

    def __init__(
        self,
        file: str,
        timezone: ZoneInfo | None,
        *,
        stamp_format: str | None = None,
        date_format: str | None = None,
        now: dt.datetime | None = None,
    ) -> None:
        self._file = file
        self._zone = timezone
        self._stamp_format = stamp_format
        self._date_format = date_format
        self.latest_s = ((now or dt.datetime.now(dt.UTC)) + AHEAD_OF_NOW).timestamp()
        self._last: tuple[Sequence[str | None], StampTable] = ((), _NO_STAMPS)

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

    def _table(self, texts: Sequence[str | None], reader: Callable[[str], _Read]) -> StampTable:
        """Return the moments of texts; a list that grew since the last call costs what is new in it."""
        known = self._last[1] if texts is self._last[0] else _NO_STAMPS
        n_known = len(known.first_s)
        new = [_BLANK if text is None else reader(text) for text in texts[n_known:]]
        moments = [each if len(each) == 3 else _UNREAD for each in new]
        first_s, second_s, snapped = np.array(moments, dtype=np.int64).reshape(-1, 3).T
        problems = {place: each for place, each in enumerate(new, n_known) if len(each) == 2}
        table = StampTable(
            np.concatenate([known.first_s, first_s]),
            np.concatenate([known.second_s, second_s]),
            np.concatenate([known.snapped, snapped.astype(np.bool_)]),
            {**known.problems, **problems},
        )
        self._last = texts, table
        return table

    def _moment(self, text: str) -> _Read:
        stamp = self._stamp_of(text)
        if isinstance(stamp, str):
            return "stamp.unreadable", stamp
        if stamp.tzinfo is None and self._zone is None:
            raise IntakeError(
                f"{self._file}: stamp {text!r} has no offset, so it is local time: "
                "name its zone with --timezone (IANA name, for instance America/Chicago)."
            )
        try:
            if stamp.tzinfo is None:
                return self._local(text, stamp)
            return self._in_range(text, stamp.timestamp(), stamp.timestamp())
        except (OverflowError, ValueError):  # the first and last years of the calendar
            return _out_of_range(text)

    def _stamp_of(self, text: str) -> dt.datetime | str:
        """Return the date and time of a text, or what is wrong with it."""
        if self._stamp_format is not None:
            try:
                return dt.datetime.strptime(text, self._stamp_format)
            except ValueError:
                return f"{text!r} is no date and time of the form {self._stamp_format}"
        end_of_day = END_OF_DAY.match(text)
        if end_of_day:
            text = f"{end_of_day[1]}T00:00{text[end_of_day.end() :]}"
        try:
            stamp = dt.datetime.fromisoformat(text)
        except ValueError:
            return f"{text!r} is no ISO 8601 date and time such as 2025-07-01T17:00:00-05:00"
        if len(text) <= len("2025-07-01"):
            return f"{text!r} is a date without a time of day"
        try:
            return stamp + dt.timedelta(days=1) if end_of_day else stamp
        except OverflowError:
            return f"{text!r} is no date of any reading"

    def _local(self, text: str, stamp: dt.datetime) -> _Read:
        # A clock that is a little off may show a time that the change of clocks leaves out.
        for shown in (stamp, _nearest(stamp)):
            first, second = (shown.replace(tzinfo=self._zone, fold=fold) for fold in (0, 1))
            there_and_back = first.astimezone(dt.UTC).astimezone(self._zone)
            if there_and_back.replace(tzinfo=None) == shown:
                return self._in_range(text, first.timestamp(), second.timestamp())
        return (
            "stamp.no_such_hour",
            f"{text!r} does not exist in {self._zone}: the clocks were put forward over it",
        )

    def _day(self, text: str) -> _Read:
        if self._zone is None:
            raise IntakeError(
                f"{self._file}: a date such as {text!r} begins at local midnight: "
                "name its zone with --timezone (IANA name, for instance America/Chicago)."
            )
        try:
            if self._date_format is not None:
                day = dt.datetime.strptime(text, self._date_format).date()
            else:
                day = dt.date.fromisoformat(text)
        except ValueError:
            form = self._date_format or "ISO 8601 such as 2025-07-01"
            return "date.unreadable", f"{text!r} is no date of the form {form}"
        try:
            midnight, following = (
                dt.datetime.combine(day + dt.timedelta(days=later), dt.time(), tzinfo=self._zone)
                for later in (0, 1)
            )
            return self._in_range(text, midnight.timestamp(), following.timestamp())
        except (OverflowError, ValueError):
            return _out_of_range(text)

    def _in_range(self, text: str, first_s: float, second_s: float) -> _Read:
        if first_s < EARLIEST.timestamp():
            return _out_of_range(text)
        if first_s > self.latest_s:
            return "stamp.future", f"{text!r} lies in the future; check the date and the zone"
        near = [round(moment / GRID_S) * GRID_S for moment in (first_s, second_s)]
        if abs(first_s - near[0]) > SNAPPED_S:
            return (
                "stamp.off_grid",
                f"{text!r} lies more than {SNAPPED_S} s beside a multiple of {GRID_S // 60} minutes",
            )
        return near[0], near[1], near[0] != first_s


def _out_of_range(text: str) -> tuple[str, str]:
    return (
        "stamp.out_of_range",
        f"{text!r} lies before {EARLIEST:%Y}, or in no year of ours; check the year",
    )


_BLANK: tuple[str, str] = ("stamp.blank", "the time of the reading is blank")


def _nearest(stamp: dt.datetime) -> dt.datetime:
    """Return a local time on the grid of five minutes, when it lies a little off."""
    since_midnight = stamp - stamp.replace(hour=0, minute=0, second=0, microsecond=0)
    off_s = (since_midnight.total_seconds() + GRID_S / 2) % GRID_S - GRID_S / 2
    try:
        return stamp - dt.timedelta(seconds=off_s) if abs(off_s) <= SNAPPED_S else stamp
    except OverflowError:
        return stamp


def day_start(text: str, zone: ZoneInfo | None) -> dt.datetime | None:
    """Return the beginning of a day, local in `zone` or else UTC; None when the text is no date."""
    try:
        day = dt.date.fromisoformat(text)
    except ValueError:
        return None
    return dt.datetime.combine(day, dt.time(), tzinfo=zone or dt.UTC)
