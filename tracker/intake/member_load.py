"""What each member of a site carried in a month: active, reactive and apparent power, side by side.

A meter may hold several quantities. Of each interval the one that says most is used: kva, then
amperes of the low-voltage side, then of the high-voltage side, then kw, with kvar where it was read
too and by the power factor where not. What was read as kva or amperes has no angle: it stands apart.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tracker.electrical.power import kva_per_amp, reactive_per_active
from tracker.intake.merge import regridded
from tracker.intake.validation import BEYOND, DOUBTED, marked
from tracker.settings import DEFAULT_POWER_FACTOR, ReadingRules
from tracker.store.blocks import (
    FlagArray,
    Float32Array,
    Quality,
    month_start_s,
    step_of,
    values_a_month,
)
from tracker.store.members import SiteMember, StandingUnit, Unmetered

#: Where a meter's spread monthly energy stands among its quantities.
SPREAD = "spread"

#: Side of the unit that amperes were read on, in the order in which the later stands before the former.
AMPS = (("amps_hv", "hv_volts"), ("amps_lv", "lv_volts"))

#: Blocks as they are held: {(series key, month): {quantity: payload}}.
Held = Mapping[tuple[int, int], Mapping[str, bytes]]


#: Stands for always [s since 1970].
EVER = 1 << 60


@dataclass(frozen=True, slots=True)
class Spans:
    """From when to when each of some things counts at a site; arrays of shape (n,)."""

    site: NDArray[np.int64]
    start_s: NDArray[np.int64]
    end_s: NDArray[np.int64]

    @classmethod
    def of(cls, things: Sequence[SiteMember] | Sequence[StandingUnit]) -> Spans:
        """Take the sites and spans of members or units."""
        starts = [
            -EVER if each.starts_at is None else each.starts_at.timestamp() for each in things
        ]
        ends = [EVER if each.ends_at is None else each.ends_at.timestamp() for each in things]
        return cls(
            np.array([each.site_key for each in things], dtype=np.int64),
            np.array(starts, dtype=np.int64),
            np.array(ends, dtype=np.int64),
        )

    def take(self, rows: NDArray[np.intp]) -> Spans:
        """Return some of them."""
        return Spans(self.site[rows], self.start_s[rows], self.end_s[rows])

    def in_month(self, month: int) -> NDArray[np.bool_]:
        """Say which count in any part of a month."""
        return (self.start_s < month_start_s(month + 1)) & (self.end_s > month_start_s(month))

    def places(self, month: int, step_min: int) -> NDArray[np.int64]:
        """Return the first place of a month that each counts in, and the first it does not; (n, 2)."""
        step_s, n_value = 60 * step_min, values_a_month(month, step_min)
        first, last = (
            np.clip(-((month_start_s(month) - edge_s) // step_s), 0, n_value)
            for edge_s in (self.start_s, self.end_s)
        )
        return np.column_stack([first, np.maximum(first, last)])


@dataclass(frozen=True, slots=True)
class Members:
    """What hangs on some sites, site by site; arrays of shape (n_member,)."""

    rows: Sequence[SiteMember]
    spans: Spans
    multiplier: NDArray[np.float64]
    whole_site: NDArray[np.bool_]
    reactive: Float32Array  #: taken to stand beside each unit of active power [kvar/kW]

    @classmethod
    def of(cls, rows: Sequence[SiteMember]) -> Members:
        """Take members as the store gives them."""
        power_factors = [row.power_factor or DEFAULT_POWER_FACTOR for row in rows]
        return cls(
            rows,
            Spans.of(rows),
            np.array([row.multiplier for row in rows], dtype=np.float64),
            np.array([row.whole_site for row in rows], dtype=np.bool_),
            reactive_per_active(power_factors).astype(np.float32),
        )

    def __len__(self) -> int:
        return len(self.rows)

    def take(self, rows: NDArray[np.intp]) -> Members:
        """Return some of them, in order."""
        if len(rows) == len(self.rows):
            return self
        return Members(
            [self.rows[row] for row in rows.tolist()],
            self.spans.take(rows),
            self.multiplier[rows],
            self.whole_site[rows],
            self.reactive[rows],
        )


@dataclass(frozen=True, slots=True)
class SiteFacts:
    """What is known of some sites beside their readings."""

    members: Members
    standing: Sequence[StandingUnit]
    standing_spans: Spans
    unmetered: Mapping[int, Unmetered]  #: by site
    rules: ReadingRules
    lit_months: Collection[int]  #: months in which unmetered load counts by itself

    def ratings(self, sites: NDArray[np.int64], month: int) -> NDArray[np.float64]:
        """Return the rating of the unit at each site in a month, the largest when it was exchanged.

        NaN where none stands. [kVA]
        """
        here = self.standing_spans.in_month(month)
        known, place = np.unique(sites, return_inverse=True)
        rated = np.full(len(known) + 1, np.nan)
        units = np.array([unit.rated_kva for unit in self.standing])[here]
        own = np.searchsorted(known, self.standing_spans.site[here])
        found = np.append(known, -1)[own] == self.standing_spans.site[here]
        np.fmax.at(rated, own[found], units[found])
        return rated[place]


@dataclass(frozen=True, slots=True)
class MemberLoads:
    """Loads of members in one month; arrays of shape (n_member, n_value), before the multiplier."""

    members: Members
    month: int
    step_min: int
    places: NDArray[
        np.int64
    ]  #: first place each counts in, and the first it does not; (n_member, 2)
    kw: Float32Array
    kvar: Float32Array
    kva: Float32Array  #: read as kva or amperes; 0 where kw was read, as these are 0 here
    flags: FlagArray  #: 0 where nothing is held; the other arrays mean nothing there
    marks: FlagArray | None = None  #: rules that readings break, a bit each; None when none is


def member_loads(
    members: Members, month: int, step_min: int, held: Held, facts: SiteFacts
) -> MemberLoads:
    """Return what members read in a month, checked by the rules; what is impossible is left out.

    Blocks of a finer step are averaged, those of a coarser one repeated.
    """
    blocks = [held.get((row.series_key, month), {}) for row in members.rows]
    kw, flags = at_step([each.get("kw") for each in blocks], month, step_min)
    kvar = kw * members.reactive[:, np.newaxis]
    _lay_reactive(kvar, flags, blocks, month, step_min)
    kva = np.zeros_like(kw)
    for quantity, side in AMPS:
        rows = _rows(blocks, quantity)
        if rows:
            factor = _kva_per_amp([members.rows[row] for row in rows], side, month, step_min, facts)
            _lay_apparent((kw, kvar, kva, flags), blocks, rows, quantity, month, step_min, factor)
    rows = _rows(blocks, "kva")
    if rows:
        _lay_apparent((kw, kvar, kva, flags), blocks, rows, "kva", month, step_min, None)
    marks = marked(
        kw,
        kvar,
        kva,
        flags,
        step_min,
        members.multiplier,
        facts.ratings(members.spans.site, month),
        members.whole_site,
        facts.rules,
    )
    if marks is not None:
        flags[(marks & np.uint8(DOUBTED)) != 0] |= np.uint8(Quality.DOUBTFUL)
        flags[(marks & np.uint8(BEYOND)) != 0] = 0
    places = members.spans.places(month, step_min)
    return MemberLoads(members, month, step_min, places, kw, kvar, kva, flags, marks)


def _rows(blocks: Sequence[Mapping[str, bytes]], quantity: str) -> list[int]:
    return [row for row, each in enumerate(blocks) if quantity in each]


def _lay_reactive(
    kvar: Float32Array,
    flags: FlagArray,
    blocks: Sequence[Mapping[str, bytes]],
    month: int,
    step_min: int,
) -> None:
    """Put reactive readings in place of what the power factor gives, where active ones are held."""
    rows = _rows(blocks, "kvar")
    if not rows:
        return
    read, read_flags = at_step([blocks[row]["kvar"] for row in rows], month, step_min)
    both = (read_flags != 0) & (flags[rows] != 0)
    kvar[rows] = np.where(both, read, kvar[rows])
    flags[rows] |= np.where(both, read_flags, 0).astype(np.uint8)


def _lay_apparent(
    arrays: tuple[Float32Array, Float32Array, Float32Array, FlagArray],
    blocks: Sequence[Mapping[str, bytes]],
    rows: Sequence[int],
    quantity: str,
    month: int,
    step_min: int,
    factor: NDArray[np.float64] | None,
) -> None:
    """Put what was read without an angle before what stands there; `factor` turns it into kVA."""
    kw, kvar, kva, flags = arrays
    read, read_flags = at_step([blocks[row].get(quantity) for row in rows], month, step_min)
    if factor is not None:
        read = (read * factor).astype(np.float32)
        read_flags = np.where(np.isnan(factor), 0, read_flags).astype(np.uint8)
    here = read_flags != 0
    kva[rows] = np.where(here, np.abs(read), kva[rows])
    flags[rows] = np.where(here, read_flags, flags[rows])
    for other in (kw, kvar):
        other[rows] = np.where(here, np.float32(0.0), other[rows])


def at_step(
    payloads: Sequence[bytes | None], month: int, step_min: int
) -> tuple[Float32Array, FlagArray]:
    """Unpack blocks of a month side by side at one step, whatever their own."""
    common = math.gcd(step_min, *(step_of(each) for each in payloads if each is not None))
    values, flags = regridded(payloads, month, common)
    times = step_min // common
    if times == 1:
        return values, flags
    parts = flags.reshape(len(flags), -1, times)
    whole = (parts != 0).all(axis=2)
    means = values.reshape(parts.shape).mean(axis=2, dtype=np.float32)
    return means, np.where(whole, np.bitwise_or.reduce(parts, axis=2), 0).astype(np.uint8)


def _kva_per_amp(
    members: Sequence[SiteMember], side: str, month: int, step_min: int, facts: SiteFacts
) -> NDArray[np.float64]:
    """Return what an ampere of each member is worth in each interval [kVA/A]; NaN where unknown."""
    factor = np.full((len(members), values_a_month(month, step_min)), np.nan)
    places = facts.standing_spans.places(month, step_min)
    units: dict[int, list[tuple[float, int, int]]] = {}
    for unit, (first, last) in zip(facts.standing, places.tolist(), strict=True):
        volts: float | None = getattr(unit, side)
        if volts is not None:
            worth = float(kva_per_amp(volts, unit.phases))
            units.setdefault(unit.site_key, []).append((worth, first, last))
    for row, member in enumerate(members):
        for worth, first, last in units.get(member.site_key, ()):
            factor[row, first:last] = worth
    return factor
