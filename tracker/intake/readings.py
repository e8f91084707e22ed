"""The readings of one file on their way into the store, a chunk at a time."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from zoneinfo import ZoneInfo

import numpy as np
from numba import njit
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.errors import InputError, IntakeError
from tracker.intake.chunk import Chunk, Part
from tracker.intake.interval import INTERVALS_MIN, found_intervals, in_time_order
from tracker.intake.merge import CORRECTED, TAKEN, UNCHANGED, Readings, merge
from tracker.intake.report import Fates, Findings
from tracker.store import readings as held_readings
from tracker.store.models import ID_LENGTH


@dataclass(frozen=True, slots=True)
class ReadingOptions:
    """How a file's stamps and values are meant."""

    timezone: ZoneInfo | None = None
    stamps_at_end: bool = False
    interval_min: int | None = None
    power_factor: float | None = None
    stamp_format: str | None = None  #: as `datetime.strptime` takes it; ISO 8601 unless said
    date_format: str | None = None

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
    stored_as: str  #: the quantity of its blocks: kw, kvar, kva, amps_lv, amps_hv or air_temp_c
    energy: bool = False  #: the value is energy in the interval, not a mean over it
    lowest: float = -1e7
    highest: float = 1e7
    unit: str = "kW"
    zero: float = 0.0  #: what is stored is (value - zero) * factor
    factor: float = 1.0


@dataclass(slots=True)
class ReadingsIntake:
    """Takes the readings of one file, of one kind of series."""

    connection: Connection
    file: str
    file_key: int
    kind: str
    rules: Sequence[QuantityRule]
    options: ReadingOptions
    fates: Fates = field(default_factory=Fates)
    touched: set[tuple[int, int]] = field(default_factory=set)
    findings: Findings = field(default_factory=Findings)
    names: dict[str, int] = field(default_factory=dict)
    readings_of_step: dict[int, int] = field(default_factory=dict)  #: [min]: how many
    snapped: int = 0  #: stamps that were a little off
    _keys: list[int] = field(default_factory=list)
    _named: tuple[list[str | None], NDArray[np.int32]] = field(
        default_factory=lambda: ([], np.empty(0, dtype=np.int32))
    )
    _last_step: NDArray[np.int32] = field(default_factory=lambda: np.zeros(0, dtype=np.int32))
    _chunk: Chunk = field(init=False)
    _repeats: dict[tuple[int, int], int] = field(default_factory=dict)
    _by_power_factor: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, dtype=np.int64))

    def __post_init__(self) -> None:
        self._chunk = Chunk(len(self.rules))

    def place_of(self, name: str) -> int:
        """Return the place of a series in this file, giving it one at its first reading."""
        return self.names.setdefault(name, len(self.names))

    def places_of(self, texts: list[str | None]) -> NDArray[np.int32]:
        """Return the places of series by their names, -1 where a text is no name.

        A list that grew since the last call costs only what is new in it.
        """
        if texts is not self._named[0]:
            self._named = texts, np.empty(0, dtype=np.int32)
        known = len(self._named[1])
        if known < len(texts):
            new = [
                self.place_of(text) if text is not None and len(text) <= ID_LENGTH else -1
                for text in texts[known:]
            ]
            places = np.concatenate([self._named[1], np.array(new, dtype=np.int32)])
            self._named = texts, places
        return self._named[1]

    @property
    def keys(self) -> Sequence[int]:
        """Keys in the store of the series merged so far, in the order of `names`."""
        return self._keys

    @property
    def needing_power_factor(self) -> NDArray[np.int64]:
        """Readings of each series that no kVA and no reactive reading stands beside."""
        return self._by_power_factor

    def add(self, part: Part) -> None:
        """Hand over the next stretch of the file."""
        for chunk in self._chunk.filled_by(self._in_range(part)):
            self._take(chunk)

    def finish(self) -> None:
        """Merge what is still waiting, and note the power factor."""
        for chunk in self._chunk.rest():
            self._take(chunk)
        if self.options.power_factor is not None and self._keys:
            changed = held_readings.set_power_factor(
                self.connection, self._keys, self.options.power_factor
            )
            self.touched |= held_readings.months_of_series(self.connection, changed)

    def _in_range(self, part: Part) -> Part:
        good = np.ones(len(part), dtype=np.bool_)
        for rule, value in zip(self.rules, part.values, strict=True):
            beyond = good & ((value < rule.lowest) | (value > rule.highest))
            reason = f"{rule.heading} is outside {rule.lowest:g} to {rule.highest:g} {rule.unit}"
            self.findings.add(part.ordinal[beyond], rule.heading, "value.out_of_range", reason)
            good &= ~beyond
        return part.where(good)

    def _take(self, part: Part) -> None:
        self._learn_keys()
        stamp_s = self._told_apart(part)
        order = in_time_order(part.series, stamp_s, len(self._keys))
        step_min, phase_min = self._intervals(part.series, stamp_s, order)
        start_s, fits, n_misfit, steps = _placed(
            part.series, stamp_s, step_min, phase_min, self.options.stamps_at_end
        )
        if n_misfit:
            self.findings.add(
                part.ordinal[~fits],
                "read_at",
                "stamp.off_grid",
                "the time does not fit the series' regular intervals; check it, or give --interval",
            )
            part, start_s, step_min = part.where(fits), start_s[fits], step_min[fits]
            order = in_time_order(part.series, start_s, len(self._keys))
        for step in np.flatnonzero(steps).tolist():
            self.readings_of_step[step] = self.readings_of_step.get(step, 0) + int(steps[step])
        self._count_fates(self._merged(part, start_s, step_min, order))
        self._note_power_factors(part)

    def _merged(
        self,
        part: Part,
        start_s: NDArray[np.int64],
        step_min: NDArray[np.int16],
        order: NDArray[np.int64],
    ) -> NDArray[np.uint8]:
        """Merge every quantity; a reading's fate is the weightiest of its quantities'."""
        keys = np.array(self._keys, dtype=np.int64)
        fate = np.zeros(len(part), dtype=np.uint8)
        for rule, value in zip(self.rules, part.values, strict=True):
            mean = _mean(value, step_min, rule.energy, rule.zero, rule.factor)
            columns = [part.series, start_s, step_min, mean, part.flags]
            held: NDArray[np.bool_] | slice = slice(None)
            if len(self.rules) > 1:
                held = ~np.isnan(value)
                columns = [column[held] for column in columns]
                order = in_time_order(columns[0], columns[1], len(keys))
            of_rule, touched = merge(
                self.connection, Readings(*columns), order, keys, rule.stored_as, self.file_key
            )
            fate[held] = np.maximum(fate[held], of_rule)
            self.touched |= touched
        return fate

    def _count_fates(self, fate: NDArray[np.uint8]) -> None:
        counts = np.bincount(fate, minlength=4).tolist()
        self.fates.add(Fates(counts[TAKEN], counts[UNCHANGED], counts[CORRECTED]))

    def _note_power_factors(self, part: Part) -> None:
        """Count the readings of active power that no other quantity stands beside."""
        active = [place for place, rule in enumerate(self.rules) if rule.stored_as == "kw"]
        if not active:
            return
        series = part.series
        if len(self.rules) > 1:
            filled = ~np.isnan(part.values)
            of_active = np.zeros(len(self.rules), dtype=np.bool_)
            of_active[active] = True
            series = series[filled[of_active].any(axis=0) & ~filled[~of_active].any(axis=0)]
        counts = np.bincount(series, minlength=len(self._keys))
        counts[: len(self._by_power_factor)] += self._by_power_factor
        self._by_power_factor = counts

    def _learn_keys(self) -> None:
        new = list(self.names)[len(self._keys) :]
        keys = held_readings.series_keys(self.connection, self.kind, new)
        self._keys += [keys[name] for name in new]
        self._last_step = np.concatenate([self._last_step, np.zeros(len(new), dtype=np.int32)])

    def _told_apart(self, part: Part) -> NDArray[np.int64]:
        """Tell the two passes of a repeated local hour apart by their order and their count.

        The first of two is the earlier in a file that runs forward in time, the later in one that
        runs backward; a lone one is the earlier.
        """
        if part.told_apart:
            return part.first_s
        twice = np.flatnonzero(part.second_s != part.first_s)
        backward = _running_backward(part, np.unique(part.series[twice]))
        which = list(zip(part.series[twice].tolist(), part.first_s[twice].tolist(), strict=True))
        count = Counter(which)
        stamp_s = part.first_s.copy()
        for i, pass_of in zip(twice.tolist(), which, strict=True):
            seen = self._repeats.get(pass_of, 0)
            self._repeats[pass_of] = seen + 1
            of_two = seen > 0 or count[pass_of] > 1
            if of_two and (seen > 0) != (pass_of[0] in backward):
                stamp_s[i] = part.second_s[i]
        return stamp_s

    def _intervals(
        self, series: NDArray[np.int32], stamp_s: NDArray[np.int64], order: NDArray[np.int64]
    ) -> tuple[NDArray[np.int16], NDArray[np.int32]]:
        """Return the interval of each reading, and the phase of each series [min]."""
        steps, last, phases = found_intervals(
            series, stamp_s, order, len(self._keys), stamps_at_end=self.options.stamps_at_end
        )
        if self.options.interval_min is not None:
            return np.full(len(series), self.options.interval_min, dtype=np.int16), phases
        untold = (phases >= 0) & (last == 0)
        if untold.any():
            last[untold] = self._learnt_elsewhere(np.flatnonzero(untold), steps)
            unknown = steps == 0
            steps[unknown] = last[series[unknown]]
        self._last_step = np.where(last > 0, last, self._last_step)
        return steps, phases

    def _learnt_elsewhere(
        self, places: NDArray[np.intp], steps: NDArray[np.int16]
    ) -> NDArray[np.int32]:
        """Return the interval of series whose stamps here do not tell it [min].

        It is that of their earlier readings in the file, else of those held, else the commonest of
        the file.
        """
        found = self._last_step[places]
        unknown = places[found == 0].tolist()
        held = held_readings.steps_held(self.connection, [self._keys[each] for each in unknown])
        found[found == 0] = [held.get(self._keys[each], 0) for each in unknown]
        if (found == 0).any():
            found[found == 0] = self._commonest(steps)
        return found

    def _commonest(self, steps: NDArray[np.int16]) -> int:
        counts = Counter(self.readings_of_step)
        counts.update(dict(enumerate(np.bincount(steps[steps > 0]).tolist())))
        if not counts.total():
            raise IntakeError(
                f"{self.file}: the interval length cannot be found from the stamps. "
                f"Give it with --interval ({', '.join(map(str, INTERVALS_MIN))} minutes)."
            )
        return counts.most_common(1)[0][0]


def _running_backward(part: Part, places: NDArray[np.int32]) -> set[int]:
    """Return the series, of some, whose newest readings come first in a stretch of the file."""
    here = np.flatnonzero(np.isin(part.series, places))
    order = here[np.argsort(part.series[here], kind="stable")]
    series, stamp_s = part.series[order], part.first_s[order]
    same = series[1:] == series[:-1]
    sense = np.sign(np.diff(stamp_s)) * same
    total = np.bincount(series[1:], weights=sense, minlength=1)
    return {place for place in places.tolist() if place < len(total) and total[place] < 0}


@njit(cache=True, nogil=True)
def _placed(series, stamp_s, step_min, phase_min, stamps_at_end):  # type: ignore[no-untyped-def]
    """Return the start of each interval [s], and whether the stamp fits its series' intervals.

    Also how many do not, and how many that do are of each length [min].
    """
    start_s = np.empty(len(series), np.int64)
    fits = np.empty(len(series), np.bool_)
    steps = np.zeros(61, np.int64)
    n_misfit = 0
    for i in range(len(series)):
        step = np.int64(step_min[i])
        start_s[i] = stamp_s[i] - 60 * step if stamps_at_end else stamp_s[i]
        fits[i] = (stamp_s[i] // 60 - phase_min[series[i]]) % step == 0
        if fits[i]:
            steps[step] += 1
        else:
            n_misfit += 1
    return start_s, fits, n_misfit, steps


@njit(cache=True, nogil=True)
def _mean(value, step_min, energy, zero, factor):  # type: ignore[no-untyped-def]
    """Return the mean over each interval; `value` is the energy in it, or the mean already."""
    mean = np.empty(len(value), np.float32)
    for i in range(len(value)):
        hours = step_min[i] / 60.0 if energy else 1.0
        mean[i] = (value[i] - zero) * factor / hours
    return mean
