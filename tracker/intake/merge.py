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

#: Blocks merged side by side; bounds the memory whatever the file.
BLOCKS_A_BATCH = 2_048

UNCHANGED, TAKEN, CORRECTED = 1, 2, 3


@dataclass(frozen=True, slots=True)
class Readings:
    """Readings in file order; arrays of shape (n_reading,)."""

    series: NDArray[np.int32]  #: place in the file's list of series keys
    start_s: NDArray[np.int64]  #: start of the interval [s since 1970, UTC]
    value: Float32Array  #: mean over the interval, in the unit of the quantity
    flags: FlagArray
    step_min: NDArray[np.int32]  #: length of the interval [min]

    def __len__(self) -> int:
        return len(self.series)


@dataclass(frozen=True, slots=True)
class _Group:
    """The readings of one series in one month: a stretch of the sorted readings."""

    series_key: int
    month: int
    start: int
    stop: int
    step_min: int


def merge(
    connection: Connection,
    readings: Readings,
    keys: NDArray[np.int64],
    quantity: str,
    file_key: int,
) -> tuple[Fates, set[tuple[int, int]]]:
    """Write readings into their blocks.

    Parameters
    ----------
    keys : int64, shape (n_series,)
        Key in the store of each series of the file.
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
    split, reading_of = _on_the_grid(readings)
    if not len(split):
        return Fates(), set()
    fate = np.zeros(len(split), dtype=np.uint8)
    order, groups = _grouped(split, keys)
    touched: set[tuple[int, int]] = set()
    for month, members in _by_month(groups):
        for part in held_readings.in_parts(members, BLOCKS_A_BATCH):
            touched |= _merge_month(connection, split, order, part, month, quantity, file_key, fate)
    if reading_of is not None:
        fate = np.maximum.reduceat(fate, reading_of)
    counts = np.bincount(fate, minlength=4)
    return Fates(int(counts[TAKEN]), int(counts[UNCHANGED]), int(counts[CORRECTED])), touched


def _on_the_grid(readings: Readings) -> tuple[Readings, NDArray[np.intp] | None]:
    """Split readings that do not begin on a multiple of their step, as in zones half an hour off.

    Returns the readings and, when any was split, the place where the parts of each begin.
    """
    offset_min = (readings.start_s // 60) % readings.step_min
    if not offset_min.any():
        return readings, None
    grid_min = np.gcd(readings.step_min, offset_min.astype(np.int32))
    n_part = readings.step_min // grid_min
    begin = np.concatenate(([0], np.cumsum(n_part)[:-1]))
    part = np.arange(n_part.sum()) - np.repeat(begin, n_part)
    step = np.repeat(grid_min, n_part)
    return (
        Readings(
            np.repeat(readings.series, n_part),
            np.repeat(readings.start_s, n_part) + part * step.astype(np.int64) * 60,
            np.repeat(readings.value, n_part),
            np.repeat(readings.flags, n_part),
            step,
        ),
        begin,
    )


def _grouped(readings: Readings, keys: NDArray[np.int64]) -> tuple[NDArray[np.int64], list[_Group]]:
    """Sort readings by series and month, keeping the file's order within; list the stretches."""
    first = month_of(int(readings.start_s.min()))
    last = month_of(int(readings.start_s.max()))
    n_month = last - first + 1
    bounds = np.array(
        [month_start_s(month) for month in range(first + 1, last + 1)], dtype=np.int64
    )
    order, starts, steps = _sort_by_group(
        readings.series, readings.start_s, readings.step_min, bounds, len(keys)
    )
    groups = [
        _Group(
            int(keys[group // n_month]),
            first + group % n_month,
            int(starts[group]),
            int(starts[group + 1]),
            int(steps[group]),
        )
        for group in np.flatnonzero(np.diff(starts)).tolist()
    ]
    return order, groups


@njit(cache=True, nogil=True)
def _sort_by_group(series, start_s, step_min, bounds, n_series):  # type: ignore[no-untyped-def]
    """Counting sort, stable, by series and then month; the finest step of each group."""
    n_month = len(bounds) + 1
    n = len(series)
    group = np.empty(n, np.int32)
    starts = np.zeros(n_series * n_month + 1, np.int64)
    steps = np.zeros(n_series * n_month, np.int64)
    month = 0
    for i in range(n):
        while month > 0 and start_s[i] < bounds[month - 1]:
            month -= 1
        while month < n_month - 1 and start_s[i] >= bounds[month]:
            month += 1
        g = series[i] * n_month + month
        group[i] = g
        starts[g + 1] += 1
        a, b = steps[g], np.int64(step_min[i])
        while b:
            a, b = b, a % b
        steps[g] = a
    for g in range(n_series * n_month):
        starts[g + 1] += starts[g]
    following = starts[:-1].copy()
    order = np.empty(n, np.int64)
    for i in range(n):
        order[following[group[i]]] = i
        following[group[i]] += 1
    return order, starts, steps


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
            readings.step_min,
            order,
            np.array([(group.start, group.stop) for group in members], dtype=np.int64),
            month_start_s(month),
            step,
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
    reading_step_min,
    order,
    stretches,
    month_s,
    step_min,
    values,
    flags,
    former,
    former_flags,
    fate,
):
    """Put readings in their places, in file order, and note what became of each."""
    n_group = len(stretches)
    dirty = np.zeros(n_group, np.bool_)
    corrected = np.zeros(n_group, np.bool_)
    for g in range(n_group):
        for at in range(stretches[g, 0], stretches[g, 1]):
            i = order[at]
            first = (start_s[i] - month_s) // (60 * step_min)
            outcome = 1
            for place in range(first, first + reading_step_min[i] // step_min):
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
