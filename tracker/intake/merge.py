"""From readings in file order to packed blocks: what is new, what is held already, what is corrected.

A block holds mean values at one step. A reading longer than the step (an hour in a block of quarter
hours) fills all the places it covers: the mean over an interval is the mean over its parts. A block
takes the finest step that any of its readings needs.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numba import njit
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.intake.report import Fates
from tracker.store import readings as held_readings
from tracker.store.blocks import (
    FlagArray,
    Float32Array,
    month_of,
    month_start_s,
    pack,
    step_of,
    unpack,
    values_a_month,
)
from tracker.store.keys import in_parts

#: Blocks merged side by side; bounds the memory whatever the file.
BLOCKS_A_BATCH = 2_048

UNCHANGED, TAKEN, CORRECTED = 1, 2, 3


@dataclass(frozen=True, slots=True)
class Readings:
    """Readings in file order; arrays of shape (n_reading,)."""

    series: NDArray[np.int32]  #: place in the file's list of series
    start_s: NDArray[np.int64]  #: start of the interval [s since 1970, UTC]
    value: Float32Array  #: mean over the interval, in the unit of the quantity
    flags: FlagArray

    def __len__(self) -> int:
        return len(self.series)


@dataclass(frozen=True, slots=True)
class SeriesFacts:
    """What is known of each series of a file; arrays of shape (n_series,)."""

    key: NDArray[np.int64]  #: its key in the store
    step_min: NDArray[np.int32]  #: length of its intervals [min]; 0 where it has no readings here
    phase_min: NDArray[np.int32]  #: minute that its intervals begin on, below the step


@dataclass(frozen=True, slots=True)
class _Group:
    """The readings of one series in one month: a stretch of the sorted readings."""

    series_key: int
    month: int
    start: int
    stop: int
    step_min: int


def merge(
    connection: Connection, readings: Readings, facts: SeriesFacts, quantity: str, file_key: int
) -> tuple[Fates, set[tuple[int, int]]]:
    """Write readings into their blocks.

    Parameters
    ----------
    quantity : str
        What the values are; one block holds one quantity.
    file_key : int
        The ledger's key of the file, noted beside the values it corrects.

    Returns
    -------
    fates : Fates
    touched : set of (series key, month)
        The blocks that changed.
    """
    if not len(readings):
        return Fates(), set()
    readings, facts, first_part = _on_the_grid(readings, facts)
    fate = np.zeros(len(readings), dtype=np.uint8)
    order, groups = _grouped(readings, facts)
    touched: set[tuple[int, int]] = set()
    for month, members in _by_month(groups):
        for part in in_parts(members, BLOCKS_A_BATCH):
            touched |= _merge_month(
                connection, readings, order, part, month, quantity, file_key, fate
            )
    if first_part is not None:
        fate = np.maximum.reduceat(fate, first_part)
    counts = np.bincount(fate, minlength=4)
    return Fates(int(counts[TAKEN]), int(counts[UNCHANGED]), int(counts[CORRECTED])), touched


def _on_the_grid(
    readings: Readings, facts: SeriesFacts
) -> tuple[Readings, SeriesFacts, NDArray[np.intp] | None]:
    """Split readings that do not begin on a multiple of their step, as in zones half an hour off.

    Returns the place where the parts of each reading begin, when any was split.
    """
    if not facts.phase_min.any():
        return readings, facts, None
    grid_min = np.gcd(facts.step_min, facts.phase_min)
    n_part = (facts.step_min // np.maximum(grid_min, 1))[readings.series]
    begin = np.concatenate(([0], np.cumsum(n_part)[:-1]))
    part = np.arange(n_part.sum()) - np.repeat(begin, n_part)
    series = np.repeat(readings.series, n_part)
    split = Readings(
        series,
        np.repeat(readings.start_s, n_part) + 60 * part * grid_min.astype(np.int64)[series],
        np.repeat(readings.value, n_part),
        np.repeat(readings.flags, n_part),
    )
    return split, SeriesFacts(facts.key, grid_min, np.zeros_like(grid_min)), begin


def _grouped(readings: Readings, facts: SeriesFacts) -> tuple[NDArray[np.int64], list[_Group]]:
    """Sort readings by series and month, keeping the file's order within; list the stretches."""
    first = month_of(int(readings.start_s.min()))
    last = month_of(int(readings.start_s.max()))
    n_month = last - first + 1
    bounds = np.array(
        [month_start_s(month) for month in range(first + 1, last + 1)], dtype=np.int64
    )
    order, starts = _sort_by_group(readings.series, readings.start_s, bounds, len(facts.key))
    groups = [
        _Group(
            int(facts.key[group // n_month]),
            first + group % n_month,
            int(starts[group]),
            int(starts[group + 1]),
            int(facts.step_min[group // n_month]),
        )
        for group in np.flatnonzero(np.diff(starts)).tolist()
    ]
    return order, groups


@njit(cache=True, nogil=True)
def _sort_by_group(series, start_s, bounds, n_series):  # type: ignore[no-untyped-def]
    """Counting sort, stable, by series and then month."""
    n_month = len(bounds) + 1
    n = len(series)
    group = np.empty(n, np.int32)
    starts = np.zeros(n_series * n_month + 1, np.int64)
    month = 0
    for i in range(n):
        while month > 0 and start_s[i] < bounds[month - 1]:
            month -= 1
        while month < n_month - 1 and start_s[i] >= bounds[month]:
            month += 1
        group[i] = series[i] * n_month + month
        starts[group[i] + 1] += 1
    for g in range(n_series * n_month):
        starts[g + 1] += starts[g]
    following = starts[:-1].copy()
    order = np.empty(n, np.int64)
    for i in range(n):
        order[following[group[i]]] = i
        following[group[i]] += 1
    return order, starts


def _by_month(groups: Sequence[_Group]) -> Iterator[tuple[int, list[_Group]]]:
    months: dict[int, list[_Group]] = {}
    for group in groups:
        months.setdefault(group.month, []).append(group)
    yield from sorted(months.items())


def _merge_month(
    connection: Connection,
    readings: Readings,
    order: NDArray[np.int64],
    groups: Sequence[_Group],
    month: int,
    quantity: str,
    file_key: int,
    fate: NDArray[np.uint8],
) -> set[tuple[int, int]]:
    held = held_readings.held_blocks(
        connection, quantity, month, [group.series_key for group in groups]
    )
    by_step: dict[int, list[_Group]] = {}
    for group in groups:
        step = group.step_min
        if group.series_key in held:
            step = math.gcd(step, step_of(held[group.series_key]))
        by_step.setdefault(step, []).append(group)
    touched: set[tuple[int, int]] = set()
    for step, members in by_step.items():
        keys = [group.series_key for group in members]
        values, flags = regridded([held.get(key) for key in keys], month, step)
        former, former_flags = np.full_like(values, np.nan), np.zeros_like(flags)
        dirty, corrected = _scatter(
            readings.start_s,
            readings.value,
            readings.flags,
            order,
            np.array([(g.start, g.stop, g.step_min // step) for g in members], dtype=np.int64),
            month_start_s(month),
            60 * step,
            values,
            flags,
            former,
            former_flags,
            fate,
        )
        changed = np.flatnonzero(dirty)
        packed = pack(values[changed], flags[changed], step)
        payloads = {keys[i]: payload for i, payload in zip(changed.tolist(), packed, strict=True)}
        held_readings.replace_blocks(connection, quantity, month, payloads, held)
        for i in np.flatnonzero(corrected).tolist():
            _keep_former(
                connection, keys[i], quantity, month, file_key, step, former[i], former_flags[i]
            )
        touched |= {(key, month) for key in payloads}
    return touched


def regridded(
    payloads: Sequence[bytes | None], month: int, step_min: int
) -> tuple[Float32Array, FlagArray]:
    """Unpack blocks of a month side by side at one step; empty rows where there is none.

    Every block's own step must be a multiple of `step_min`.
    """
    n_value = values_a_month(month, step_min)
    values = np.full((len(payloads), n_value), np.nan, dtype=np.float32)
    flags = np.zeros((len(payloads), n_value), dtype=np.uint8)
    by_step: dict[int, list[int]] = {}
    for place, payload in enumerate(payloads):
        if payload is not None:
            by_step.setdefault(step_of(payload), []).append(place)
    for step, places in by_step.items():
        held = [payload for place in places if (payload := payloads[place]) is not None]
        held_values, held_flags = unpack(held)
        times = step // step_min
        values[places] = np.repeat(held_values, times, axis=1) if times > 1 else held_values
        flags[places] = np.repeat(held_flags, times, axis=1) if times > 1 else held_flags
    return values, flags


@njit(cache=True, nogil=True)
def _scatter(  # type: ignore[no-untyped-def]
    start_s,
    value,
    flag,
    order,
    stretches,
    month_s,
    step_s,
    values,
    flags,
    former,
    former_flags,
    fate,
):
    """Put readings in their places, in file order, and note what became of each.

    A stretch is (first, last + 1) in `order`, and how many places each of its readings fills.
    """
    n_group = len(stretches)
    dirty = np.zeros(n_group, np.bool_)
    corrected = np.zeros(n_group, np.bool_)
    for g in range(n_group):
        for at in range(stretches[g, 0], stretches[g, 1]):
            i = order[at]
            first = (start_s[i] - month_s) // step_s
            outcome = 1
            for place in range(first, first + stretches[g, 2]):
                if flags[g, place] == 0:
                    outcome = max(outcome, 2)
                elif values[g, place] == value[i] and flags[g, place] == flag[i]:
                    continue
                else:
                    outcome = 3
                    corrected[g] = True
                    if former_flags[g, place] == 0:
                        former[g, place] = values[g, place]
                        former_flags[g, place] = flags[g, place]
                values[g, place] = value[i]
                flags[g, place] = flag[i]
            fate[i] = outcome
            if outcome > 1:
                dirty[g] = True
    return dirty, corrected


def _keep_former(
    connection: Connection,
    series_key: int,
    quantity: str,
    month: int,
    file_key: int,
    step_min: int,
    former: Float32Array,
    flags: FlagArray,
) -> None:
    """Store what a file replaced; what it replaced first stays, when a part of it came earlier."""
    earlier = held_readings.superseded_block(connection, series_key, quantity, month, file_key)
    if earlier is not None:
        step = math.gcd(step_min, step_of(earlier))
        first_values, first_flags = regridded([earlier], month, step)
        times = step_min // step
        former, flags = np.repeat(former, times), np.repeat(flags, times)
        known = first_flags[0] != 0
        former, flags = (
            np.where(known, first_values[0], former).astype(np.float32),
            np.where(known, first_flags[0], flags).astype(np.uint8),
        )
        step_min = step
    (payload,) = pack(former[np.newaxis], flags[np.newaxis], step_min)
    held_readings.keep_superseded(connection, series_key, quantity, month, file_key, payload)
