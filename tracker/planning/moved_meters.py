"""Meters that may hang at a neighbouring site: where moving one makes two odd loads ordinary.

A unit is chosen so that its peak load comes near its rating, so over a fleet the logarithm of peak
load over rating lies in a band. Where one site is far above the band and a neighbour far below it,
each meter of the first is put at the second in thought, alone or in exchange for one of its meters,
and both peak loads are taken again, interval by interval. A pair of sites that both come back into
the band is a hint.
"""

from __future__ import annotations

import datetime as dt
import itertools
import math
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.assessment.profiles import Period, steps_of, unpacked_rows
from tracker.intake.member_load import member_loads
from tracker.intake.site_load import Batch, batches, lay_spread, members_in
from tracker.planning.doubt_settings import DoubtSettings
from tracker.planning.places import Place, load_exceeded
from tracker.store import readings as held_readings
from tracker.store.blocks import Float32Array, month_start_s
from tracker.store.doubtful import ConnectedMeter

#: Meters of a site that are tried in exchange for another, those whose move alone does most.
METERS_EXCHANGED = 3

#: What an exchange must gain over a move: two wrong entries are less likely than one.
EXCHANGE_GAIN = 1.0

#: Peak load over rating below which it makes no difference how far [1].
LEAST_PEAK_PU = 0.005

EARTH_RADIUS_KM = 6371.0


@dataclass(frozen=True, slots=True)
class Band:
    """Where the logarithms of a figure lie: their median and robust standard deviation."""

    centre: float
    spread: float

    @classmethod
    def of(cls, figures: Sequence[float], least_spread: float) -> Band:
        """Return the band of figures above 0, by median and median absolute deviation.

        Examples
        --------
        >>> Band.of([0.5, 1.0, 2.0], 0.1).usual
        1.0
        """
        logs = np.log(np.asarray(figures, dtype=np.float64))
        centre = float(np.median(logs))
        # 1.4826 makes it the standard deviation where figures are normal.
        spread = 1.4826 * float(np.median(np.abs(logs - centre)))
        return cls(centre, max(spread, least_spread))

    @property
    def usual(self) -> float:
        """The figure in the middle."""
        return math.exp(self.centre)

    def distance(self, figure: float, least: float = 0.0) -> float:
        """Return how far a figure lies from the middle, in standard deviations, below it negative.

        NaN for one that is not known.
        """
        return (math.log(max(figure, least)) - self.centre) / self.spread


@dataclass(frozen=True, slots=True)
class Search:
    """What peaks are held against."""

    band: Band  #: of peak load over rating
    limits: DoubtSettings

    def distance(self, peak_pu: float) -> float:
        """Return how far a peak lies from the band's middle, in standard deviations."""
        return self.band.distance(peak_pu, LEAST_PEAK_PU)


@dataclass(frozen=True, slots=True)
class Move:
    """A meter that may hang at another site than it is written down at."""

    meter: ConnectedMeter
    meter_peak_kva: float
    others_peak_kva: (
        float  #: median of the other meters' peaks at its site; NaN where there is none
    )
    here: Place  #: where it is written down
    there: Place  #: where it may hang
    exchanged_with: ConnectedMeter | None  #: that would hang here instead
    distance_km: float  #: NaN where the places are not known
    here_pu: float  #: peak load over rating, as written down
    there_pu: float
    here_after_pu: float  #: and if the meter hung there
    there_after_pu: float
    gain: float

    def reversed(self, meter_peak_kva: float, others_peak_kva: float) -> Move:
        """Return an exchange as seen from the other meter."""
        assert self.exchanged_with is not None
        return Move(
            self.exchanged_with,
            meter_peak_kva,
            others_peak_kva,
            self.there,
            self.here,
            self.meter,
            self.distance_km,
            self.there_pu,
            self.here_pu,
            self.there_after_pu,
            self.here_after_pu,
            self.gain,
        )


def moved_meters(
    connection: Connection, period: Period, places: Sequence[Place], search: Search
) -> list[Move]:
    """Return the moves that make both sites ordinary, the one that does most first.

    Each site is in one move or exchange at most; an exchange comes as two.
    """
    found: list[list[Move]] = []
    for pairs in _pairs_by_feeder(places, search):
        loads = _Loads(connection, period, {place for pair in pairs for place in pair})
        found += [moves for pair in pairs if (moves := _best_moves(loads, *pair, search))]
    found.sort(key=lambda moves: (-moves[0].gain, moves[0].meter.meter_id))
    taken: set[int] = set()
    kept: list[Move] = []
    for moves in found:
        sites = {moves[0].here.site_key, moves[0].there.site_key}
        if not sites & taken:
            taken |= sites
            kept += moves
    return kept


# --- Pairs of sites -------------------------------------------------------------------------------


def _pairs_by_feeder(
    places: Sequence[Place], search: Search
) -> Iterator[list[tuple[Place, Place]]]:
    """Yield each feeder's sites that are loaded far too much, with a neighbour far too little."""
    by_feeder: dict[str | None, list[Place]] = {}
    for place in places:
        if not place.measured_whole and (place.known_h > 0 or _waits(place)):
            by_feeder.setdefault(place.feeder, []).append(place)
    for feeder, own in by_feeder.items():
        distances = [search.distance(0.0 if _waits(each) else each.peak_pu) for each in own]
        low = {row for row, each in enumerate(distances) if each <= -search.limits.uncommon}
        high = [row for row, each in enumerate(distances) if each >= search.limits.uncommon]
        if not low or not high:
            continue
        points_km = np.array([_point_km(place) for place in own])
        pairs = []
        for row in high:
            far_km = np.linalg.norm(points_km - points_km[row], axis=1)
            if np.isfinite(far_km[row]):
                beside = _nearest(far_km, search.limits)
            elif feeder is not None:  # no telling which are near: those of the feeder
                beside = sorted(low, key=distances.__getitem__)
            else:
                beside = []
            others = [each for each in beside if each in low][: search.limits.neighbours]
            pairs += [(own[row], own[each]) for each in others]
        if pairs:
            yield pairs


def _waits(place: Place) -> bool:
    """Say whether a site has customers and no meter: all of its load is written down elsewhere."""
    return not place.meters and bool(place.customers)


def _nearest(far_km: NDArray[np.float64], limits: DoubtSettings) -> list[int]:
    """Return the rows of the sites beside one, itself among them; NaN is nowhere."""
    nearest = np.argsort(far_km, kind="stable")[: limits.neighbours + 1]
    return [int(row) for row in nearest if far_km[row] <= limits.within_km]


def _point_km(place: Place) -> tuple[float, float, float]:
    """Return a place on the globe in three dimensions, where near ones are a straight line apart."""
    if place.latitude is None or place.longitude is None:
        return math.nan, math.nan, math.nan
    north, east = math.radians(place.latitude), math.radians(place.longitude)
    return (
        EARTH_RADIUS_KM * math.cos(north) * math.cos(east),
        EARTH_RADIUS_KM * math.cos(north) * math.sin(east),
        EARTH_RADIUS_KM * math.sin(north),
    )


def distance_km(one: Place, other: Place) -> float:
    """Return how far two places are apart; NaN where one is not known."""
    return math.dist(_point_km(one), _point_km(other))


# --- Loads, as written down and otherwise ---------------------------------------------------------


class _Loads:
    """Loads of some sites and of each of their meters, side by side [kVA].

    Meters are read as the derivation of site load reads them. Each load has the sign of its active
    power, so that export counts against use; that angles differ from meter to meter is left out, so
    what a move would make of a peak is near, not exact.
    """

    def __init__(self, connection: Connection, period: Period, places: Collection[Place]) -> None:
        sites = sorted({place.site_key for place in places})
        blocks = held_readings.site_load_blocks(connection, sites, period.months)
        self._period = period
        self._step_min = math.gcd(*steps_of(blocks).values()) or 60
        of_site = unpacked_rows(blocks, sites, period, self._step_min)
        self._n_time = of_site.shape[1]
        self._of_meter: dict[int, Float32Array] = {}
        for place in places:
            for meter in place.meters:
                self._of_meter[meter.key] = np.full(self._n_time, np.nan, dtype=np.float32)
        first, last = period.months
        site_months = itertools.product(sites, range(first, last + 1))
        for batch in batches(connection, site_months):
            for month, own in batch.sites_of_month.items():
                self._take_month(batch, month, own)
        self._of_site = {
            place.site_key: self._signed(of_site[sites.index(place.site_key)], place)
            if place.meters
            else np.zeros(self._n_time, dtype=np.float32)
            for place in places
        }

    def _take_month(self, batch: Batch, month: int, sites: Sequence[int]) -> None:
        """Put what each meter read in a month where it hung on its site."""
        members, _ = members_in(batch.facts, sites, month)
        loads = member_loads(members, month, self._step_min, batch.held, batch.facts)
        lay_spread(loads, batch.held)
        load_kva = np.copysign(np.hypot(loads.kw, loads.kvar), loads.kw) + loads.kva
        first = (month_start_s(month) - self._period.start_s) // (60 * self._step_min)
        for row, member in enumerate(members.rows):
            if member.series_key not in self._of_meter:
                continue
            hung = np.arange(*loads.places[row])
            in_period = (hung + first >= 0) & (hung + first < self._n_time)
            hung = hung[in_period & (loads.flags[row, hung] != 0)]
            self._of_meter[member.series_key][hung + first] = (
                load_kva[row, hung] * member.multiplier
            )

    def _signed(self, load_kva: Float32Array, place: Place) -> Float32Array:
        """Give the magnitude of a site's load the sign of the sum of its meters."""
        net = np.nansum([self._of_meter[meter.key] for meter in place.meters], axis=0)
        signed: Float32Array = np.copysign(load_kva, net).astype(np.float32)
        return signed

    def since(self, moments: Sequence[dt.datetime | None]) -> slice:
        """Return the places of the period after all of some moments."""
        newest_s = max(
            (int(each.timestamp()) for each in moments if each), default=self._period.start_s
        )
        return slice(max(0, -(-(newest_s - self._period.start_s) // (60 * self._step_min))), None)

    def of_meter(self, meter: ConnectedMeter) -> Float32Array:
        """Return a meter's load with its sign; NaN where nothing was read."""
        return self._of_meter[meter.key]

    def of_site(self, place: Place) -> Float32Array:
        """Return a site's load with its sign; NaN where it is not known."""
        return self._of_site[place.site_key]


@dataclass(frozen=True, slots=True)
class _Tried:
    """A move, and what it would make of the two sites."""

    meter: ConnectedMeter
    exchanged_with: ConnectedMeter | None
    before_pu: tuple[float, float]
    after_pu: tuple[float, float]
    gain: float
    miscounted: int  #: sites whose meters would not be as many as the register's customers


def _best_moves(loads: _Loads, here: Place, there: Place, search: Search) -> list[Move]:
    """Return the move or exchange between two sites that explains most; none if none does."""
    single = [_tried(loads, here, there, meter, None, search) for meter in here.meters]
    single.sort(key=lambda tried: (-tried.gain, tried.meter.meter_id))
    exchanges = [
        _tried(loads, here, there, tried.meter, other, search)
        for tried in single[:METERS_EXCHANGED]
        for other in there.meters
    ]
    sizes = {meter.meter_id: _sizes(loads, meter, here, search) for meter in here.meters}
    good = [
        tried
        for tried in (*single, *exchanges)
        if _is_hint(tried, *sizes[tried.meter.meter_id], search)
    ]
    if not good:
        return []
    best = min(
        good,
        key=lambda tried: (
            tried.miscounted,
            -tried.gain + (EXCHANGE_GAIN if tried.exchanged_with else 0.0),
            tried.meter.meter_id,
        ),
    )
    move = Move(
        best.meter,
        *sizes[best.meter.meter_id],
        here,
        there,
        best.exchanged_with,
        distance_km(here, there),
        *best.before_pu,
        *best.after_pu,
        best.gain,
    )
    if best.exchanged_with is None:
        return [move]
    return [move, move.reversed(*_sizes(loads, best.exchanged_with, there, search))]


def _tried(
    loads: _Loads,
    here: Place,
    there: Place,
    meter: ConnectedMeter,
    other: ConnectedMeter | None,
    search: Search,
) -> _Tried:
    """Move a meter in thought, and take both peaks since all of it has been as it is."""
    part = loads.since([each.starts_at for each in (here, there, meter, other) if each is not None])
    carried = loads.of_meter(meter)[part]
    if other is not None:
        carried = carried - loads.of_meter(other)[part]
    of_here, of_there = loads.of_site(here)[part], loads.of_site(there)[part]

    def peak_pu(load_kva: NDArray[np.float32], place: Place) -> float:
        return load_exceeded(np.abs(load_kva), search.limits.peak_share) / place.rated_kva

    before = peak_pu(of_here, here), peak_pu(of_there, there)
    after = peak_pu(of_here - carried, here), peak_pu(of_there + carried, there)
    gain = _oddity(before, search) - _oddity(after, search)
    moved = 1 if other is None else 0
    counts = ((here, len(here.meters) - moved), (there, len(there.meters) + moved))
    miscounted = sum(
        place.customers is not None and place.customers != count for place, count in counts
    )
    return _Tried(
        meter, other, before, after, gain if math.isfinite(gain) else -math.inf, miscounted
    )


def _oddity(peaks_pu: tuple[float, float], search: Search) -> float:
    return sum(search.distance(each) ** 2 for each in peaks_pu)


def _is_hint(tried: _Tried, meter_peak_kva: float, others_peak_kva: float, search: Search) -> bool:
    """Say whether both sites are odd as written down, and ordinary otherwise."""
    stands_out = (
        meter_peak_kva >= search.limits.stands_out * others_peak_kva
    )  # never where it is alone
    least_gain = search.limits.least_gain / 2 if stands_out else search.limits.least_gain
    high, low = (search.distance(each) for each in tried.before_pu)
    ordinary = all(abs(search.distance(each)) <= search.limits.possible for each in tried.after_pu)
    odd = high >= search.limits.uncommon and low <= -search.limits.uncommon
    return odd and ordinary and tried.gain >= least_gain


def _sizes(
    loads: _Loads, meter: ConnectedMeter, place: Place, search: Search
) -> tuple[float, float]:
    """Return a meter's peak, and the median of those of the other meters of its site [kVA]."""
    peaks: Mapping[str, float] = {
        each.meter_id: load_exceeded(np.abs(loads.of_meter(each)), search.limits.peak_share)
        for each in place.meters
    }
    others = [
        peak for name, peak in peaks.items() if name != meter.meter_id and math.isfinite(peak)
    ]
    return peaks[meter.meter_id], float(np.median(others)) if others else math.nan
