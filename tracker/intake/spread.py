"""Energy of a month, spread over its hours by the shape of meters that are read at intervals.

The shape of a class on a feeder is the mean, hour by hour, of its meters' load over their own mean in
that month, so that each customer counts alike; negative hours count as none. In hours in which no meter
of the class is read on the feeder, those of the class anywhere stand in, and where there are none at
all, an invented shape. A spread block is a function of what the store holds, whatever came first.
"""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.intake.member_load import at_step
from tracker.settings import DEFAULT_POWER_FACTOR
from tracker.store import energy
from tracker.store import readings as held_readings
from tracker.store.blocks import Quality, month_of, month_start_s, pack, step_of, values_a_month
from tracker.store.energy import MeterEnergy, OnFeeder
from tracker.store.keys import in_parts

#: Meters worked on at a time; bounds the memory.
METERS_A_BATCH = 1_000

SPREAD_FLAGS = Quality.HELD | Quality.ESTIMATED | Quality.SPREAD

#: What a meter's shape is taken from, the first that it holds.
SHAPE_QUANTITIES = ("kw", "kva", "amps_lv", "amps_hv")

#: Invented days, by the hour from local midnight, over their own mean: where no meter of a class is read
#: at intervals. Homes: a small peak at breakfast, the large one in the evening. Businesses: the working
#: day, and a third of it at weekends.
# fmt: off
HOME_DAY = np.array([
    0.62, 0.55, 0.51, 0.49, 0.50, 0.58, 0.78, 0.97, 0.96, 0.90, 0.88, 0.90,
    0.94, 0.96, 0.99, 1.06, 1.22, 1.46, 1.66, 1.70, 1.62, 1.42, 1.12, 0.83,
])
BUSINESS_DAY = np.array([
    0.50, 0.48, 0.47, 0.47, 0.50, 0.60, 0.82, 1.15, 1.45, 1.60, 1.66, 1.68,
    1.64, 1.66, 1.67, 1.62, 1.50, 1.28, 1.02, 0.84, 0.72, 0.64, 0.58, 0.53,
])
# fmt: on
WEEKEND_SHARE = 1.0 / 3.0

#: A class with one of these in its name works business hours; all others live as homes do.
BUSINESS_WORDS = (
    "business",
    "commercial",
    "industr",
    "office",
    "school",
    "shop",
    "service",
    "farm",
)

FloatArray = NDArray[np.float64]

#: Meters that share a shape: class, feeder, and whether on that feeder alone or anywhere.
_Group = tuple[str | None, str | None, bool]


def renew(
    connection: Connection,
    touched: Collection[tuple[int, int]],
    classes: Iterable[str | None] = (),
) -> set[tuple[int, int]]:
    """Spread anew what depends on changed readings, energy, connections or classes.

    Parameters
    ----------
    touched : collection of (meter key, month)
    classes : iterable of str or None
        Classes that meters were taken out of.

    Returns
    -------
    set of (meter key, month)
        The blocks that came out otherwise than they were.
    """
    if not touched:
        return set()
    months = {month for _, month in touched}
    near = energy.energy_between(
        connection, _moment(month_start_s(min(months))), _moment(month_start_s(max(months) + 1))
    )
    if not near:
        return set()
    changed_classes = {*classes, *energy.classes(connection, {key for key, _ in touched}).values()}
    class_of = energy.classes(connection, {row.meter_key for row in near})
    wanted = {
        (row.meter_key, month)
        for row in near
        if class_of[row.meter_key] in changed_classes and not months.isdisjoint(_months(row))
        for month in _months(row)
    }
    changed: set[tuple[int, int]] = set()
    for made in spread_payloads(connection, wanted):
        months_made = [month for _, month in made]
        held = energy.spread_blocks(
            connection, sorted({key for key, _ in made}), (min(months_made), max(months_made))
        )
        former = {(key, month): payload for key, month, payload in held}
        other = {place: payload for place, payload in made.items() if former.get(place) != payload}
        energy.replace_spread(connection, other)
        changed |= set(other)
    return changed


def months_of_meters(connection: Connection, meters: Collection[int]) -> set[tuple[int, int]]:
    """Return the (meter key, month) that readings or energy are held of."""
    keys = sorted(meters)
    found = held_readings.months_of_series(connection, keys)
    for row in energy.monthly_energy(connection, keys):
        found.update((row.meter_key, month) for month in _months(row))
    return found


def spread_payloads(
    connection: Connection, wanted: Collection[tuple[int, int]] | None = None
) -> Iterator[dict[tuple[int, int], bytes | None]]:
    """Yield spread blocks as the store's readings give them, some meters at a time.

    Parameters
    ----------
    wanted : collection of (meter key, month), optional
        All that there is energy of, unless said.
    """
    rows = energy.monthly_energy(connection, None if wanted is None else {key for key, _ in wanted})
    if wanted is None:
        wanted = {(row.meter_key, month) for row in rows for month in _months(row)}
    wanted = set(wanted)
    rows = [row for row in rows if any((row.meter_key, m) in wanted for m in _months(row))]
    of_meter: dict[int, list[MeterEnergy]] = {}
    for row in rows:
        of_meter.setdefault(row.meter_key, []).append(row)
    class_of = energy.classes(connection, of_meter)
    shapes = _Shapes(connection, set(class_of.values()))
    months_of: dict[int, list[int]] = {}
    for key, month in sorted(wanted):
        months_of.setdefault(key, []).append(month)
    for meters in in_parts(sorted(of_meter), METERS_A_BATCH):
        feeders = _by_meter(energy.meters_on_feeders(connection, meters))
        held = _held_blocks(connection, meters, [row for key in meters for row in of_meter[key]])
        made: dict[tuple[int, int], bytes | None] = {}
        for key in meters:
            pieces = [
                _spread(row, held, shapes, class_of[key], feeders.get(key, ()))
                for row in of_meter[key]
            ]
            for month in months_of[key]:
                made[key, month] = _block(month, [each for each in pieces if each.touches(month)])
        yield made


# --- One meter ------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Piece:
    """Energy of one period, spread; NaN where the meter was read."""

    start_s: int
    step_min: int
    kw: FloatArray

    @property
    def end_s(self) -> int:
        return self.start_s + 60 * self.step_min * len(self.kw)

    def touches(self, month: int) -> bool:
        return self.start_s < month_start_s(month + 1) and self.end_s > month_start_s(month)


def _spread(
    row: MeterEnergy,
    held: Mapping[tuple[int, int], Mapping[str, bytes]],
    shapes: _Shapes,
    customer_class: str | None,
    feeders: Sequence[OnFeeder],
) -> _Piece:
    """Spread what the readings of a period do not hold of its energy over its other intervals."""
    start_s, end_s = int(row.starts_at.timestamp()), int(row.ends_at.timestamp())
    months = _months(row)
    steps = [step_of(block) for m in months for block in held.get((row.meter_key, m), {}).values()]
    step_min = math.gcd(60, start_s // 60, end_s // 60, *steps)
    weight = np.concatenate(
        [
            np.repeat(shapes.of(customer_class, feeders, month, start_s), 60 // step_min)
            for month in months
        ]
    )
    read = [_read(held.get((row.meter_key, month), {}), month, step_min) for month in months]
    kw, is_read = (np.concatenate(parts) for parts in zip(*read, strict=True))
    first = (start_s - month_start_s(months[0])) // (60 * step_min)
    part = slice(first, first + (end_s - start_s) // (60 * step_min))
    weight, kw, is_read = weight[part], kw[part], is_read[part]
    left_kwh = max(row.kwh - np.nansum(kw) * step_min / 60.0, 0.0)
    open_ = np.isnan(kw)  # also what was read in amperes: of unknown energy, its share is left out
    if open_.any() and weight[open_].sum() <= 0.0:
        weight = np.ones_like(weight)
    total = weight[open_].sum()
    spread_kw = np.full(len(weight), np.nan)
    free = ~is_read
    spread_kw[free] = weight[free] * (left_kwh / (total * step_min / 60.0)) if total > 0.0 else 0.0
    return _Piece(start_s, step_min, spread_kw)


def _read(
    blocks: Mapping[str, bytes], month: int, step_min: int
) -> tuple[FloatArray, NDArray[np.bool_]]:
    """Return the active power that is read in a month [kW], NaN where none is, and where anything is."""
    kw = np.full(values_a_month(month, step_min), np.nan)
    is_read = np.zeros(len(kw), dtype=np.bool_)
    for quantity, factor in (("kva", DEFAULT_POWER_FACTOR), ("kw", 1.0)):
        if quantity in blocks:
            values, flags = at_step([blocks[quantity]], month, step_min)
            kw = np.where(flags[0] != 0, values[0] * factor, kw)
    for quantity in SHAPE_QUANTITIES:
        if quantity in blocks:
            is_read |= at_step([blocks[quantity]], month, step_min)[1][0] != 0
    return kw, is_read


def _block(month: int, pieces: Sequence[_Piece]) -> bytes | None:
    """Pack the parts of periods that lie in a month; None where all of it was read."""
    if not pieces:
        return None
    step_min = math.gcd(*(piece.step_min for piece in pieces))
    kw = np.full(values_a_month(month, step_min), np.nan)
    for piece in pieces:
        values = np.repeat(piece.kw, piece.step_min // step_min)
        first = (piece.start_s - month_start_s(month)) // (60 * step_min)
        start, stop = max(first, 0), min(first + len(values), len(kw))
        kw[start:stop] = values[start - first : stop - first]
    flags = np.where(np.isnan(kw), 0, int(SPREAD_FLAGS)).astype(np.uint8)
    if not flags.any():
        return None
    (payload,) = pack(kw.astype(np.float32)[np.newaxis], flags[np.newaxis], step_min)
    return payload


# --- Shapes ---------------------------------------------------------------------------------------


class _Shapes:
    """The mean shapes of classes, made month by month as they are asked for."""

    def __init__(self, connection: Connection, classes: Collection[str | None]) -> None:
        self._connection = connection
        self._class_of = dict(energy.meters_of_classes(connection, classes))
        self._feeders = _by_meter(energy.meters_on_feeders(connection, self._class_of))
        self._made: dict[int, dict[_Group, FloatArray]] = {}

    def of(
        self, customer_class: str | None, feeders: Sequence[OnFeeder], month: int, midnight_s: int
    ) -> FloatArray:
        """Return the shape for a meter in a month, hour by hour.

        Parameters
        ----------
        feeders : sequence of OnFeeder
            Where the meter hangs.
        midnight_s : int
            Any local midnight [s since 1970, UTC], for the invented shape.
        """
        if month not in self._made:
            self._made[month] = self._means(month)
        made = self._made[month]
        shape = invented_shape(customer_class, month, midnight_s)
        anywhere = made.get((customer_class, None, False))
        if anywhere is not None:
            shape = np.where(np.isnan(anywhere), shape, anywhere)
        for each in feeders:
            on_feeder = made.get((customer_class, each.feeder, True))
            if on_feeder is not None:
                first, last = _hours(each, month)
                known = ~np.isnan(on_feeder[first:last])
                shape[first:last][known] = on_feeder[first:last][known]
        return shape

    def _means(self, month: int) -> dict[_Group, FloatArray]:
        """Return the mean shape of each class anywhere, and on each feeder; NaN where none is read."""
        n_hour = values_a_month(month, 60)
        sums: dict[_Group, tuple[FloatArray, FloatArray]] = {}
        for meters in in_parts(list(self._class_of), METERS_A_BATCH):
            for key, load in _loads_over_mean(self._connection, meters, month):
                own = self._class_of[key]
                parts: list[tuple[_Group, int, int]] = [((own, None, False), 0, n_hour)]
                parts += [
                    ((own, each.feeder, True), *_hours(each, month))
                    for each in self._feeders.get(key, ())
                ]
                for group, first, last in parts:
                    total, n = sums.setdefault(group, (np.zeros(n_hour), np.zeros(n_hour)))
                    here = load[first:last]
                    known = ~np.isnan(here)
                    total[first:last][known] += here[known]
                    n[first:last] += known
        return {
            group: np.where(n > 0, np.maximum(total, 0.0) / np.maximum(n, 1.0), np.nan)
            for group, (total, n) in sums.items()
        }


def _loads_over_mean(
    connection: Connection, meters: Sequence[int], month: int
) -> Iterator[tuple[int, FloatArray]]:
    """Yield the load of each meter that is read in a month, over its own mean, hour by hour."""
    blocks: dict[int, dict[str, bytes]] = {}
    for key, _, quantity, payload in held_readings.load_blocks(connection, meters, (month, month)):
        blocks.setdefault(key, {})[quantity] = payload
    chosen = {
        key: next((own[quantity] for quantity in SHAPE_QUANTITIES if quantity in own), None)
        for key, own in blocks.items()
    }
    keys = [key for key in meters if chosen.get(key) is not None]
    if not keys:
        return
    values, flags = at_step([chosen[key] for key in keys], month, 60)
    for key, load, known in zip(keys, values.astype(np.float64), flags != 0, strict=True):
        mean = load[known].mean() if known.any() else 0.0
        if mean > 0.0:
            yield key, np.where(known, load / mean, np.nan)


def invented_shape(customer_class: str | None, month: int, midnight_s: int) -> FloatArray:
    """Return the invented shape of a class in a month, hour by hour, over its own mean.

    >>> float(invented_shape("home", 666, 0).mean().round(6))
    1.0
    """
    hours = (month_start_s(month) - midnight_s) // 3600 + np.arange(values_a_month(month, 60))
    is_business = any(word in (customer_class or "").casefold() for word in BUSINESS_WORDS)
    shape = (BUSINESS_DAY if is_business else HOME_DAY)[hours % 24]
    if is_business:
        midnight_day = dt.datetime.fromtimestamp(midnight_s, dt.UTC) + dt.timedelta(hours=12)
        weekday = (midnight_day.weekday() + hours // 24) % 7
        shape = np.where(weekday < 5, shape, WEEKEND_SHARE * shape)
    over_mean: FloatArray = shape / shape.mean()
    return over_mean


# --- Small things ---------------------------------------------------------------------------------


def _months(row: MeterEnergy) -> range:
    """Return the months, in UTC, that a period touches."""
    return range(
        month_of(int(row.starts_at.timestamp())), month_of(int(row.ends_at.timestamp()) - 1) + 1
    )


def _moment(seconds: int) -> dt.datetime:
    return dt.datetime.fromtimestamp(seconds, dt.UTC)


def _hours(span: OnFeeder, month: int) -> tuple[int, int]:
    """Return the first hour of a month that a meter hangs on a feeder, and the first it does not."""
    start_s, n_hour = month_start_s(month), values_a_month(month, 60)
    first = 0 if span.starts_at is None else (int(span.starts_at.timestamp()) - start_s) // 3600
    last = n_hour if span.ends_at is None else (int(span.ends_at.timestamp()) - start_s) // 3600
    first = min(max(first, 0), n_hour)
    return first, min(max(last, first), n_hour)


def _by_meter(rows: Iterable[OnFeeder]) -> dict[int, list[OnFeeder]]:
    found: dict[int, list[OnFeeder]] = {}
    for row in rows:
        found.setdefault(row.meter_key, []).append(row)
    return found


def _held_blocks(
    connection: Connection, meters: Sequence[int], rows: Sequence[MeterEnergy]
) -> dict[tuple[int, int], dict[str, bytes]]:
    """Return the blocks of meters in the months that some energy touches."""
    months = [month for row in rows for month in _months(row)]
    held: dict[tuple[int, int], dict[str, bytes]] = {}
    for key, month, quantity, payload in held_readings.load_blocks(
        connection, meters, (min(months), max(months))
    ):
        held.setdefault((key, month), {})[quantity] = payload
    return held
