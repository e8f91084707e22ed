"""Filling gaps inside a series: short ones by a straight line, longer ones by the mean of like days.

A gap is filled only where readings stand on both sides of it, and none longer than the weeks that
like days are looked for in: nothing is invented behind the newest reading. Like days lie whole weeks
apart in UTC, so that in the weeks about a change of the clock they are an hour off in local time.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.intake.member_load import MemberLoads
from tracker.settings import ReadingRules
from tracker.store.blocks import FlagArray, Float32Array, Quality

WEEK_MIN = 7 * 1440

_HELD = int(Quality.HELD)
_LINE = int(Quality.HELD | Quality.FILLED)
_LIKE = int(Quality.HELD | Quality.LIKE_DAYS)
_ANY = _LINE | _LIKE  #: of these a reading has the first alone


@dataclass(frozen=True, slots=True)
class Gaps:
    """Rows whose gaps may be filled, and whether the months beside them must be looked at."""

    rows: NDArray[np.intp]
    opens: NDArray[np.bool_]  #: begins with a gap: only the month before tells what came before it
    closes: NDArray[np.bool_]  #: ends with a gap
    inside: NDArray[np.bool_]  #: has a gap inside that is too long for a line
    short: NDArray[np.bool_]  #: has one that is not


def found_gaps(loads: MemberLoads, rules: ReadingRules) -> Gaps:
    """Find the rows that have readings, and gaps that could be filled."""
    held = loads.flags != 0
    n_held = np.count_nonzero(held, axis=1)
    rows = np.flatnonzero((n_held > 0) & (n_held < held.shape[1]))
    longest = _longest(rules, loads.step_min)
    if not longest or not len(rows):
        none = np.zeros(0, dtype=np.bool_)
        return Gaps(rows[:0], none, none, none, none)
    kinds = _kinds(held[rows], loads.places[rows], longest, _line(rules, loads.step_min))
    some = kinds.any(axis=1)
    kinds = kinds[some]
    return Gaps(rows[some], *kinds.T)


def fill(
    loads: MemberLoads,
    rows: NDArray[np.intp],
    before: MemberLoads | None,
    after: MemberLoads | None,
    rules: ReadingRules,
) -> None:
    """Fill the gaps of some rows, in place.

    Parameters
    ----------
    before, after : MemberLoads, optional
        The months beside it, of those rows only and at the same step; None where nothing is held.
    """
    week = WEEK_MIN // loads.step_min
    n_week = int(rules.like_weeks)
    reach = max(n_week * week, _line(rules, loads.step_min))
    n_value = loads.flags.shape[1]
    shape = (len(rows), n_value + 2 * reach)
    flags = np.zeros(shape, dtype=np.uint8)
    power = np.zeros((3, *shape), dtype=np.float32)
    for part, month, into in (
        (slice(-reach, None), before, slice(0, reach)),
        (slice(0, reach), after, slice(reach + n_value, None)),
    ):
        if month is not None:
            flags[:, into] = month.flags[:, part]
            for which, values in enumerate((month.kw, month.kvar, month.kva)):
                power[which, :, into] = values[:, part]
    middle = slice(reach, reach + n_value)
    flags[:, middle] = loads.flags[rows]
    for which, values in enumerate((loads.kw, loads.kvar, loads.kva)):
        power[which, :, middle] = values[rows]
    _fill(power, flags, reach, reach + n_value, _line(rules, loads.step_min), week, n_week)
    loads.flags[rows] = flags[:, middle]
    for which, values in enumerate((loads.kw, loads.kvar, loads.kva)):
        values[rows] = power[which, :, middle]


def _line(rules: ReadingRules, step_min: int) -> int:
    """Return the longest gap that is filled by a line [places]."""
    return int(rules.line_gap_h * 60.0) // step_min


def _longest(rules: ReadingRules, step_min: int) -> int:
    """Return the longest gap that is filled at all [places]."""
    return max(_line(rules, step_min), int(rules.like_weeks) * WEEK_MIN // step_min)


def _gaps_of(
    held: NDArray[np.bool_],
) -> tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.intp]]:
    """Return row, first place and first place after it of every gap."""
    n_row, n_value = held.shape
    framed = np.ones((n_row, n_value + 2), dtype=np.bool_)  # so that every gap has two edges
    framed[:, 1:-1] = held
    flat = framed.ravel()
    edges = np.flatnonzero(flat[1:] != flat[:-1])
    row, start = np.divmod(edges[::2], n_value + 2)
    return row, start, edges[1::2] - row * (n_value + 2)


def _kinds(
    held: NDArray[np.bool_], places: NDArray[np.int64], longest: int, line: int
) -> NDArray[np.bool_]:
    """Say of each row whether it opens with a gap, closes with one, or has a long or short one inside."""
    row, start, stop = _gaps_of(held)
    length = stop - start
    counts = (length <= longest) & (start < places[row, 1]) & (stop > places[row, 0])
    kind = np.select([start == 0, stop == held.shape[1], length > line], [0, 1, 2], 3)
    kinds = np.zeros((len(held), 4), dtype=np.bool_)
    kinds[row[counts], kind[counts]] = True
    return kinds


def _fill(
    power: Float32Array, flags: FlagArray, first: int, stop: int, line: int, week: int, n_week: int
) -> None:
    """Fill the places from `first` to `stop` of each row from readings anywhere in it.

    Rows reach `n_week` weeks beyond those places on both sides.
    """
    is_read = (flags & _ANY) == _HELD
    row, start, end = _gaps_of(is_read)
    length = end - start
    # Readings on both sides, and some of it between `first` and `stop`.
    closed = (start > 0) & (end < flags.shape[1]) & (start < stop) & (end > first)
    short = closed & (length <= line)
    gap, at = _places_in(np.maximum(start[short], first), np.minimum(end[short], stop))
    _draw_line(power, flags, row[short][gap], at, start[short][gap] - 1, end[short][gap])
    long = closed & (length > line) & (length <= n_week * week)
    gap, at = _places_in(np.maximum(start[long], first), np.minimum(end[long], stop))
    _take_like_days(power, flags, is_read, row[long][gap], at, week, n_week)


def _places_in(
    start: NDArray[np.intp], end: NDArray[np.intp]
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Return every place of some stretches, and before it which stretch it is of."""
    length = end - start
    which = np.repeat(np.arange(len(start)), length)
    begins = np.cumsum(length) - length
    return which, np.arange(len(which)) + (start - begins)[which]


def _draw_line(
    power: Float32Array,
    flags: FlagArray,
    row: NDArray[np.intp],
    at: NDArray[np.intp],
    last: NDArray[np.intp],
    following: NDArray[np.intp],
) -> None:
    """Fill places from the readings last before each and first after it."""
    share = (at - last) / (following - last)
    start, end = power[:, row, last], power[:, row, following]
    power[:, row, at] = start + share * (end - start)
    flags[row, at] = _LINE


def _take_like_days(
    power: Float32Array,
    flags: FlagArray,
    is_read: NDArray[np.bool_],
    row: NDArray[np.intp],
    at: NDArray[np.intp],
    week: int,
    n_week: int,
) -> None:
    """Take the mean of the readings whole weeks before and after; leave the gap where there is none."""
    n = np.zeros(len(at), dtype=np.int64)
    total = np.zeros((3, len(at)))
    place = row * flags.shape[1] + at
    for k in range(-n_week, n_week + 1):
        like = place + k * week  # in the same row, which reaches as far on both sides
        known = is_read.ravel()[like]  # never so in the gap itself, where k is 0
        n += known
        for which in range(3):
            total[which] += np.where(known, power[which].ravel()[like], np.float32(0.0))
    some = n > 0
    power[:, row[some], at[some]] = total[:, some] / n[some]
    flags[row[some], at[some]] = _LIKE
