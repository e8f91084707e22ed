"""Rules that readings must pass; each is a setting, and marks what it finds.

All rules look at one meter and one month in UTC: what they find does not depend on the order in
which months come in. A run that crosses the turn of the month is therefore counted on either side of
it by itself.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from tracker.settings import ReadingRules
from tracker.store.blocks import FlagArray, Float32Array

#: For functions called from Python, and from C never: a second way in takes long to compile.
FROM_PYTHON: dict[str, Any] = {"no_cfunc_wrapper": True}

#: A bit for each rule; all but the last doubt a reading, the last sets it aside.
SPIKE, STUCK, ZEROS, NEGATIVE, BEYOND = 1, 2, 4, 8, 16
DOUBTED = SPIKE | STUCK | ZEROS | NEGATIVE


@dataclass(frozen=True, slots=True)
class Rule:
    """A rule in words."""

    name: str
    bit: int
    finds: str
    sets_aside: bool = False


RULES = (
    Rule("spike", SPIKE, "the highest reading of a day stands far above the third highest"),
    Rule("stuck", STUCK, "the same reading over and over"),
    Rule("zeros", ZEROS, "zero for days"),
    Rule("negative", NEGATIVE, "a few negative readings where nothing seems to export"),
    Rule("beyond", BEYOND, "more than fuse and unit could have carried", sets_aside=True),
)


def marked(
    kw: Float32Array,
    kvar: Float32Array,
    kva: Float32Array,
    flags: FlagArray,
    step_min: int,
    multiplier: NDArray[np.float64],
    rated_kva: NDArray[np.float64],
    whole_site: NDArray[np.bool_],
    rules: ReadingRules,
) -> FlagArray | None:
    """Return the rules that each reading breaks, a bit each; None when none does.

    Parameters
    ----------
    kw, kvar, kva : float32, shape (n_member, n_value)
        Active and reactive power, and apparent power read as such; 0 where the other was read.
    flags : uint8, shape (n_member, n_value)
        0 where nothing is held.
    multiplier : float64, shape (n_member,)
    rated_kva : float64, shape (n_member,)
        Rating of the unit each hangs on; NaN where there is none, and rules that need it rest. [kVA]
    whole_site : bool, shape (n_member,)
        Measured at the unit itself: never set aside.

    Returns
    -------
    marks : uint8, shape (n_member, n_value), or None
    """
    lowest_kw = np.fmin.reduce(kw, axis=1)
    largest = _largest(lowest_kw, kw, kvar, kva)
    high = np.where(whole_site | (rules.beyond_rating == 0.0), np.nan, rules.beyond_rating)
    high = high * rated_kva / multiplier
    least = rules.spike_least_load_pct / 100.0 * rated_kva / multiplier
    marks = np.zeros(flags.shape, dtype=np.uint8)
    # Most rows hold nothing that a rule could find, and need no second look.
    rows = np.flatnonzero(largest > high)
    if len(rows):
        marks[rows] = _beyond(kw[rows], kvar[rows], kva[rows], flags[rows], high[rows, np.newaxis])
    rows = np.flatnonzero((largest >= least) & (rules.spike_excess_pct > 0.0))
    if len(rows):
        excess = rules.spike_excess_pct / 100.0
        _mark_spikes(kw, kvar, kva, flags, rows, 1440 // step_min, excess, least, marks)
    stuck, zeros = _places(rules.stuck_h, step_min), _places(rules.zero_run_h, step_min)
    rows = _may_run(kw, kva, min(stuck, zeros))
    if len(rows):
        marks[rows] |= _runs(kw[rows] + kva[rows], flags[rows], marks[rows], stuck, zeros)
    rows = np.flatnonzero((lowest_kw < 0.0) & (rules.negative_pct > 0.0))
    if len(rows):
        read = (flags[rows] != 0) & ((marks[rows] & BEYOND) == 0)
        marks[rows] |= _negative(kw[rows], read, rules.negative_pct / 100.0)
    return marks if marks.any() else None


def _largest(
    lowest_kw: Float32Array, kw: Float32Array, kvar: Float32Array, kva: Float32Array
) -> NDArray[np.float64]:
    """Return a bound of the size of each row's readings [kVA]."""
    active = np.fmax(np.fmax.reduce(kw, axis=1), -lowest_kw).astype(np.float64)
    reactive = np.fmax(np.fmax.reduce(kvar, axis=1), -np.fmin.reduce(kvar, axis=1))
    with_angle = np.hypot(np.nan_to_num(active), np.nan_to_num(reactive.astype(np.float64)))
    return np.asarray(with_angle + np.fmax.reduce(kva, axis=1))


def _places(hours: float, step_min: int) -> float:
    """Return how many places a length fills, at least one; infinite when the rule is off."""
    return max(np.ceil(hours * 60.0 / step_min), 1.0) if hours > 0.0 else np.inf


def _as_marks(found: NDArray[np.bool_], bit: int) -> FlagArray:
    """Return a rule's bit where it found something."""
    return found * np.uint8(bit)


def _beyond(
    kw: Float32Array,
    kvar: Float32Array,
    kva: Float32Array,
    flags: FlagArray,
    high: NDArray[np.float64],
) -> FlagArray:
    """Mark what is larger than `high` [kVA]; a limit that is not known is never passed."""
    larger = (kw * kw + kvar * kvar > high * high) | (kva > high)
    return _as_marks(larger & (flags != 0), BEYOND)


# The only rule that numpy takes much longer for: the others are not compiled.
@njit(cache=True, nogil=True, **FROM_PYTHON)
def _mark_spikes(  # type: ignore[no-untyped-def]
    kw, kvar, kva, flags, rows, day_places, excess, least, marks
):
    """Mark the highest readings of each day that stand above the third by more than `excess`."""
    for m in rows:
        for start in range(0, flags.shape[1], day_places):
            top = second = third = 0.0
            for t in range(start, start + day_places):
                value = kw[m, t] + kva[m, t]
                if value > third and flags[m, t] and not marks[m, t]:
                    third = value
                    if third > second:
                        second, third = third, second
                    if second > top:
                        top, second = second, top
            if third > 0.0 and top - third > excess * third:
                for t in range(start, start + day_places):
                    p, q, s = kw[m, t], kvar[m, t], kva[m, t]
                    high = p + s - third > excess * third and flags[m, t] and not marks[m, t]
                    if high and math.sqrt(p * p + q * q) + s >= least[m]:
                        marks[m, t] = SPIKE


def _may_run(kw: Float32Array, kva: Float32Array, shortest: float) -> NDArray[np.intp]:
    """Return the rows that could hold a run [places]: such a run covers two neighbours of those that lie
    half its length apart, and they hold the same."""
    if shortest > kw.shape[1]:
        return np.zeros(0, dtype=np.intp)
    stride = int(shortest // 2)
    if stride < 1:
        return np.arange(len(kw))
    value = kw[:, ::stride] + kva[:, ::stride]
    return np.flatnonzero((value[:, 1:] == value[:, :-1]).any(axis=1))


def _runs(
    value: Float32Array, flags: FlagArray, marks: FlagArray, stuck: float, zeros: float
) -> FlagArray:
    """Mark runs of one value that last as long as `stuck`, or `zeros` when it is zero [places]."""
    counts = (flags != 0) & ((marks & BEYOND) == 0)
    begins = np.ones(value.shape, dtype=np.bool_)
    begins[:, 1:] = (value[:, 1:] != value[:, :-1]) | ~(counts[:, 1:] & counts[:, :-1])
    first = np.flatnonzero(begins)
    length = np.diff(first, append=value.size)
    is_zero = value.ravel()[first] == 0.0
    long = (length >= np.where(is_zero, zeros, stuck)) & (flags.ravel()[first] != 0)
    bits = _as_marks(long, STUCK)
    bits[long & is_zero] = ZEROS
    return np.repeat(bits, length).reshape(value.shape)


def _negative(kw: Float32Array, read: NDArray[np.bool_], share: float) -> FlagArray:
    """Mark negative readings when they are a smaller share of the month than `share`."""
    found = read & (kw < 0.0)
    few = np.count_nonzero(found, axis=1) < share * np.count_nonzero(read, axis=1)
    return _as_marks(found & few[:, np.newaxis], NEGATIVE)
