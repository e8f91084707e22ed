"""The readings of one file on their way into the store, a chunk at a time."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from zoneinfo import ZoneInfo

import numpy as np
from numba import njit
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.errors import InputError, IntakeError
from tracker.intake.interval import INTERVALS_MIN, found_intervals
from tracker.intake.merge import Readings, SeriesFacts, merge
from tracker.intake.report import Fates, Finding
from tracker.store import readings as held_readings
from tracker.store.blocks import Quality, step_of

#: Readings merged at a time: bounds the memory whatever the file.
READINGS_A_CHUNK = 4_000_000

#: The smallest grid that readings may begin on [min].
FINEST_GRID_MIN = 5


@dataclass(frozen=True, slots=True)
class ReadingOptions:
    """How a file's stamps and values are meant."""

    timezone: ZoneInfo | None = None
    stamps_at_end: bool = False
    interval_min: int | None = None
    power_factor: float | None = None

    def __post_init__(self) -> None:
        if self.interval_min is not None and self.interval_min not in INTERVALS_MIN:
            raise InputError(
                f"interval = {self.interval_min} min is not known; "
                f"allowed are {', '.join(map(str, INTERVALS_MIN))}."
            )
        if self.power_factor is not None and not 0 < self.power_factor <= 1:
            raise InputError(
                f"power factor = {self.power_factor:g} is out of range; allowed: above 0, up to 1."
            )


@dataclass(frozen=True, slots=True)
class QuantityRule:
    """What a value column holds, and what is possible in it."""

    heading: str
    stored_as: str  #: kw, kva or air_temp_c
    energy: bool = False  #: the value is energy in the interval, not a mean over it
    lowest: float = -1e7
    highest: float = 1e7
    unit: str = "kW"


@dataclass(frozen=True, slots=True)
class Part:
    """Readings as the parser gave them: one stretch of the file, in its order."""

    series: NDArray[np.int32]  #: place in `ReadingsIntake.names`
    first_s: NDArray[np.int64]  #: stamp [s since 1970, UTC]
    second_s: NDArray[
        np.int64
    ]  #: the later moment of a repeated local hour; `first_s` itself if none
    value: NDArray[np.float64]
    flags: NDArray[np.uint8]
    ordinal: NDArray[np.int64]

    def __len__(self) -> int:
        return len(self.series)

    def where(self, mask: NDArray[np.bool_]) -> Part:
        """Return the readings under the mask."""
        if mask.all():
            return self
        first_s = self.first_s[mask]
        return Part(
            self.series[mask],
            first_s,
            first_s if self.second_s is self.first_s else self.second_s[mask],
            self.value[mask],
            self.flags[mask],
            self.ordinal[mask],
        )


@dataclass(slots=True)
class ReadingsIntake:
    """Takes the readings of one file, of one kind of series and one quantity."""

    connection: Connection
    file: str
    file_key: int
    kind: str
    rule: QuantityRule
    options: ReadingOptions
    fates: Fates = field(default_factory=Fates)
    touched: set[tuple[int, int]] = field(default_factory=set)
    findings: list[Finding] = field(default_factory=list)
    names: dict[str, int] = field(default_factory=dict)
    steps_found: set[int] = field(default_factory=set)
    _keys: list[int] = field(default_factory=list)
    _steps: dict[int, int] = field(default_factory=dict)
    _parts: list[Part] = field(default_factory=list)
    _waiting: int = 0
    _repeats: dict[tuple[int, int], int] = field(default_factory=dict)

    def place_of(self, name: str) -> int:
        """Return the place of a series in this file, giving it one at its first reading."""
        return self.names.setdefault(name, len(self.names))

    def refuse(
        self, ordinals: NDArray[np.int64] | Sequence[int], column: str, code: str, reason: str
    ) -> None:
        """Note readings that cannot be taken."""
        self.findings += [Finding(int(each), column, code, reason) for each in ordinals]

    def add(self, part: Part) -> None:
        """Hand over the next stretch of the file."""
        part = self._in_range(part)
        if len(part):
            self._parts.append(part)
            self._waiting += len(part)
        if self._waiting >= READINGS_A_CHUNK:
            self._flush()

    def finish(self) -> None:
        """Merge what is still waiting, and note the power factor."""
        self._flush()
        if self.options.power_factor is not None and self._keys:
            changed = held_readings.set_power_factor(
                self.connection, self._keys, self.options.power_factor
            )
            self.touched |= held_readings.months_of_series(self.connection, changed)

    def _in_range(self, part: Part) -> Part:
        rule = self.rule
        good = (part.value >= rule.lowest) & (part.value <= rule.highest)
        for place in np.flatnonzero(~good).tolist():
            self.refuse(
                [part.ordinal[place]],
                rule.heading,
                "value.out_of_range",
                f"{rule.heading} = {part.value[place]:g} {rule.unit} is outside "
                f"{rule.lowest:g} to {rule.highest:g} {rule.unit}",
            )
        return part.where(good)

    def _flush(self) -> None:
        if not self._parts:
            return
        part = _joined(self._parts)
        self._parts, self._waiting = [], 0
        self._learn_keys()
        stamp_s = self._told_apart(part)
        step_min, phase_min = self._intervals(part.series, stamp_s)
        self.steps_found.update(np.unique(step_min[step_min > 0]).tolist())
        start_s, value, fits = _placed(
            part.series,
            stamp_s,
            part.value,
            step_min,
            phase_min,
            self.options.stamps_at_end,
            self.rule.energy,
        )
        series, flags = part.series, part.flags
        if not fits.all():
            self.refuse(
                part.ordinal[~fits],
                "read_at",
                "stamp.off_grid",
                "the time does not fit the series' regular intervals; check it, or give --interval",
            )
            series, start_s, value, flags = series[fits], start_s[fits], value[fits], flags[fits]
        fates, touched = merge(
            self.connection,
            Readings(series, start_s, value, flags),
            SeriesFacts(np.array(self._keys, dtype=np.int64), step_min, phase_min),
            self.rule.stored_as,
            self.file_key,
        )
        self.fates.add(fates)
        self.touched |= touched

    def _learn_keys(self) -> None:
        new = list(self.names)[len(self._keys) :]
        keys = held_readings.series_keys(self.connection, self.kind, new)
        self._keys += [keys[name] for name in new]

    def _told_apart(self, part: Part) -> NDArray[np.int64]:
        """Tell the two passes of a repeated local hour apart by their order in the file."""
        if part.second_s is part.first_s:
            return part.first_s
        twice = np.flatnonzero(part.second_s != part.first_s)
        stamp_s = part.first_s.copy()
        for i in twice.tolist():
            which = (int(part.series[i]), int(part.first_s[i]))
            seen = self._repeats.get(which, 0)
            self._repeats[which] = seen + 1
            if seen:
                stamp_s[i] = part.second_s[i]
        return stamp_s

    def _intervals(
        self, series: NDArray[np.int32], stamp_s: NDArray[np.int64]
    ) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
        """Return step and phase [min] of each series; 0 of those without a reading here."""
        steps, phases = found_intervals(series, stamp_s, len(self._keys))
        here = phases >= 0
        if self.options.interval_min is not None:
            steps[here] = self.options.interval_min
        for place in np.flatnonzero(here & (steps == 0)).tolist():
            held = held_readings.any_block(self.connection, self._keys[place])
            steps[place] = self._steps.get(place) or (step_of(held) if held is not None else 0)
        unknown = here & (steps == 0)
        if unknown.any():
            steps[unknown] = self._commonest(steps)
        self._steps.update((place, int(steps[place])) for place in np.flatnonzero(here).tolist())
        return steps, np.where(here, phases % np.maximum(steps, 1), 0).astype(np.int32)

    def _commonest(self, steps: NDArray[np.int32]) -> int:
        known = steps[steps > 0]
        if not len(known):
            raise IntakeError(
                f"{self.file}: the interval length cannot be found from the stamps. "
                f"Give it with --interval ({', '.join(map(str, INTERVALS_MIN))} minutes)."
            )
        return int(np.bincount(known).argmax())


def _joined(parts: Sequence[Part]) -> Part:
    if len(parts) == 1:
        return parts[0]
    first_s = np.concatenate([part.first_s for part in parts])
    told = all(part.second_s is part.first_s for part in parts)
    return Part(
        np.concatenate([part.series for part in parts]),
        first_s,
        first_s if told else np.concatenate([part.second_s for part in parts]),
        np.concatenate([part.value for part in parts]),
        np.concatenate([part.flags for part in parts]),
        np.concatenate([part.ordinal for part in parts]),
    )


@njit(cache=True, nogil=True)
def _placed(  # type: ignore[no-untyped-def]
    series, stamp_s, value, step_min, phase_min, stamps_at_end, energy
):
    """Return start [s], mean value, and whether the stamp fits its series' intervals."""
    n = len(series)
    start_s = np.empty(n, np.int64)
    mean = np.empty(n, np.float32)
    fits = np.empty(n, np.bool_)
    for i in range(n):
        step, phase = np.int64(step_min[series[i]]), np.int64(phase_min[series[i]])
        minute = stamp_s[i] // 60
        fits[i] = (
            minute * 60 == stamp_s[i]
            and (minute - phase) % step == 0
            and phase % FINEST_GRID_MIN == 0
        )
        start_s[i] = stamp_s[i] - 60 * step if stamps_at_end else stamp_s[i]
        mean[i] = value[i] * (60.0 / step) if energy else value[i]
    return start_s, mean, fits


#: Words of the quality column; the utility's own codes go through a column guide.
QUALITY_WORDS = {
    "measured": Quality.HELD,
    "estimated": Quality.HELD | Quality.ESTIMATED,
}
MISSING_WORD = "missing"
