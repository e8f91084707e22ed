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

from tracker.intake.interval import in_time_order
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
    step_min: NDArray[np.int16]  #: length of the interval [min]
    value: Float32Array  #: mean over the interval, in the unit of the quantity
    flags: FlagArray

    def __len__(self) -> int:
        return len(self.series)


@dataclass(frozen=True, slots=True)
class _Group:
    """The readings of one series in one month: a stretch of the sorted readings."""

    series_key: int
    month: int
    start: int
    stop: int
    step_min: int  #: the longest that all its readings fit


def merge(
    connection: Connection,
    readings: Readings,
    order: NDArray[np.int64],
    keys: NDArray[np.int64],
    quantity: str,
    file_key: int,
) -> tuple[NDArray[np.uint8], set[tuple[int, int]]]:
    """Write readings into their blocks.

    Parameters
    ----------
    order : int64, shape (n_reading,)
        By series and time, those of one moment in the order of the file.
    keys : int64, shape (n_series,)
        Key in the store of each series of the file.
    quantity : str
        What the values are; one block holds one quantity.
    file_key : int
        The ledger's key of the file, noted beside the values it corrects.

    Returns
    -------
    fate : uint8, shape (n_reading,)
        UNCHANGED, TAKEN or CORRECTED.
    touched : set of (series key, month)
        The blocks that changed.
    """
    if not len(readings):
        return np.zeros(0, dtype=np.uint8), set()
    readings, first_part = _on_the_grid(readings)
    fate = np.zeros(len(readings), dtype=np.uint8)
    if first_part is not None or not _starts_rise(readings.series, readings.start_s, order):
        order = in_time_order(readings.series, readings.start_s, len(keys))
    groups = _grouped(readings, order, keys)
    touched: set[tuple[int, int]] = set()
    for month, members in _by_month(groups):
        for part in in_parts(members, BLOCKS_A_BATCH):
            touched |= _merge_month(
                connection, readings, order, part, month, quantity, file_key, fate
            )
    if first_part is not None:
        fate = np.maximum.reduceat(fate, first_part)
    return fate, touched


def _on_the_grid(readings: Readings) -> tuple[Readings, NDArray[np.intp] | None]:
    """Split readings that do not begin on a multiple of their step, as in zones half an hour off.

    Returns the place where the parts of each reading begin, when any was split.
    """
    if _all_on_the_grid(readings.start_s, readings.step_min):
        return readings, None
    phase_min = (readings.start_s // 60 % readings.step_min).astype(np.int16)
    grid_min = np.gcd(readings.step_min, phase_min)
    n_part = readings.step_min // grid_min
    begin = np.concatenate(([0], np.cumsum(n_part, dtype=np.intp)[:-1]))
    part = np.arange(n_part.sum(dtype=np.intp)) - np.repeat(begin, n_part)
    split = Readings(
        np.repeat(readings.series, n_part),
        np.repeat(readings.start_s, n_part) + 60 * part * np.repeat(grid_min, n_part),
        np.repeat(grid_min, n_part),
        np.repeat(readings.value, n_part),
        np.repeat(readings.flags, n_part),
    )
    return split, begin


@njit(cache=True, nogil=True)
def _all_on_the_grid(start_s, step_min):  # type: ignore[no-untyped-def]
    for i in range(len(start_s)):  # noqa: SIM110 - compiled
        if start_s[i] % (60 * np.int64(step_min[i])):
            return False
    return True


@njit(cache=True, nogil=True)
def _starts_rise(series, start_s, order):  # type: ignore[no-untyped-def]
    """Say whether intervals begin in order, as they may not where their lengths change."""
    for at in range(1, len(order)):
        i, before = order[at], order[at - 1]
        if series[i] == series[before] and start_s[i] < start_s[before]:
            return False
    return True


def _grouped(readings: Readings, order: NDArray[np.int64], keys: NDArray[np.int64]) -> list[_Group]:
    """List the stretches of one series and month."""
    first = month_of(int(readings.start_s.min()))
    last = month_of(int(readings.start_s.max()))
    bounds = np.array([month_start_s(month) for month in range(first, last + 2)], dtype=np.int64)
    begins, months, steps = _stretches(
        readings.series, readings.start_s, readings.step_min, order, bounds
    )
    series = readings.series[order[begins[:-1]]]
    return [
        _Group(*each)
        for each in zip(
            keys[series].tolist(),
            (months + first).tolist(),
            begins[:-1].tolist(),
            begins[1:].tolist(),
            steps.tolist(),
            strict=True,
        )
    ]


@njit(cache=True, nogil=True)
def _stretches(series, start_s, step_min, order, bounds):  # type: ignore[no-untyped-def]
    """Return where each stretch begins, and the end; the month of each; the step it needs."""
    begins = np.empty(len(order) + 1, np.int64)
    months = np.empty(len(order), np.int64)
    steps = np.empty(len(order), np.int16)
    n = -1
    of_series = -1
    for at in range(len(order)):
        i = order[at]
        if series[i] != of_series or start_s[i] >= bounds[months[n] + 1]:
            month = 0 if series[i] != of_series else months[n]
            while start_s[i] >= bounds[month + 1]:
                month += 1
            n += 1
            of_series = series[i]
            begins[n], months[n], steps[n] = at, month, step_min[i]
        elif step_min[i] != steps[n]:
            steps[n] = math.gcd(steps[n], step_min[i])
    n += 1
    begins[n] = len(order)
    return begins[: n + 1].copy(), months[:n].copy(), steps[:n].copy()


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
            readings.step_min,
            readings.value,
            readings.flags,
            order,
            np.array([(g.start, g.stop) for g in members], dtype=np.int64),
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
    step_min,
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

    A stretch is (first, last + 1) in `order`.
    """
    n_group = len(stretches)
    dirty = np.zeros(n_group, np.bool_)
    corrected = np.zeros(n_group, np.bool_)
    for g in range(n_group):
        for at in range(stretches[g, 0], stretches[g, 1]):
            i = order[at]
            first = (start_s[i] - month_s) // step_s
            outcome = 1
            for place in range(first, first + 60 * np.int64(step_min[i]) // step_s):
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
