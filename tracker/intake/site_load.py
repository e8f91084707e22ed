"""From readings to the load of each site: derived anew wherever something that it stands on changed.

The load of a site-month is a function of what the store holds, whatever the order in which it came:
of the readings of what hangs on the site, of the month before and after where there are gaps to fill,
of the connections, of the units that stand there, and of the rules.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable, Collection, Iterable, Iterator, Mapping, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from tracker.intake import spread
from tracker.intake.daylight import dark_share
from tracker.intake.filling import Gaps, fill, found_gaps
from tracker.intake.member_load import (
    SPREAD,
    Held,
    MemberLoads,
    Members,
    SiteFacts,
    Spans,
    member_loads,
)
from tracker.intake.merge import regridded
from tracker.intake.summing import summed
from tracker.intake.validation import BEYOND, RULES
from tracker.store import energy, fleet
from tracker.store import members as on_sites
from tracker.store import readings as held_readings
from tracker.store.blocks import Quality, pack, step_of
from tracker.store.rules import reading_rules

#: Readings worked on side by side [bytes of blocks]; bounds the memory, whatever their step.
BYTES_A_BATCH = 20_000_000

#: Sites of the first batch, before the size of their blocks is known, and of the largest.
FIRST_SITES, MOST_SITES = 100, 2_000

#: Batches computed beside each other while others are read and written.
WORKERS = 2

Given = TypeVar("Given")
Made = TypeVar("Made")


@dataclass(frozen=True, slots=True)
class Derived:
    """What was derived, and what validation and filling did on the way."""

    n_site_months: int = 0
    marked: Mapping[str, int] = field(default_factory=dict)  #: readings, by rule
    n_line: int = 0  #: readings filled by a straight line
    n_like_days: int = 0  #: readings filled by like days
    n_scaled: int = 0  #: values of sites scaled for missing meters

    def __add__(self, other: Derived) -> Derived:
        names = [
            rule.name for rule in RULES if rule.name in self.marked or rule.name in other.marked
        ]
        return Derived(
            self.n_site_months + other.n_site_months,
            {name: self.marked.get(name, 0) + other.marked.get(name, 0) for name in names},
            self.n_line + other.n_line,
            self.n_like_days + other.n_like_days,
            self.n_scaled + other.n_scaled,
        )

    def notes(self) -> list[str]:
        """Return lines for a person; none where nothing is worth a word."""
        lines: list[str] = []
        aside = sum(self.marked.get(rule.name, 0) for rule in RULES if rule.sets_aside)
        doubted = [
            f"{self.marked[rule.name]:,} by rule {rule.name}"
            for rule in RULES
            if rule.name in self.marked and not rule.sets_aside
        ]
        if doubted:
            lines.append(f"readings doubted, their values kept: {', '.join(doubted)}")
        if aside:
            lines.append(
                f"{aside:,} readings set aside, beyond what fuse and unit could have carried"
            )
        if self.n_line or self.n_like_days:
            lines.append(
                f"gaps: {self.n_line:,} readings filled by a straight line, "
                f"{self.n_like_days:,} by like days"
            )
        if self.n_scaled:
            lines.append(f"{self.n_scaled:,} values of sites scaled for meters that are missing")
        return lines

    def as_facts(self) -> dict[str, Any]:
        """Return the counts for the ledger."""
        return {
            "site_months_derived": self.n_site_months,
            "readings_marked": dict(self.marked),
            "filled_by_line": self.n_line,
            "filled_by_like_days": self.n_like_days,
            "site_values_scaled": self.n_scaled,
        }


@dataclass(frozen=True, slots=True)
class SiteMonths:
    """Derived loads of some sites in one month."""

    month: int
    payloads: Mapping[int, bytes | None]  #: by site; None of those that nothing is known of
    measured: Mapping[int, bytes | None]
    counts: Derived


def derive(connection: Connection, touched: Iterable[tuple[int, int]]) -> Derived:
    """Derive the load of every site that changed readings count for.

    Parameters
    ----------
    touched : iterable of (series key, month)
    """
    touched = set(touched)
    touched |= spread.renew(connection, touched)
    beside = _beside(touched)
    gapped = held_readings.with_gaps(connection, beside)
    sites = held_readings.sites_of_series(
        connection, sorted({series for series, _ in touched | gapped})
    )
    changed = {(site, month) for series, month in touched for site in sites.get(series, ())}
    changed |= on_sites.not_all_measured(connection, _beside(changed))
    changed |= {(site, month) for series, month in gapped for site in sites.get(series, ())}
    changed |= on_sites.unlit(connection, {month for _, month in touched})
    return derive_sites(connection, changed)


def _beside(places: Collection[tuple[int, int]]) -> set[tuple[int, int]]:
    """Return the months before and after, which may be filled from those given."""
    return {(key, month + by) for key, month in places for by in (-1, 1)} - set(places)


def derive_sites(connection: Connection, site_months: Iterable[tuple[int, int]]) -> Derived:
    """Derive the load of sites anew: {(site key, month)}."""
    total = Derived()
    for made in site_loads(connection, site_months):
        held_readings.replace_site_load(connection, made.month, made.payloads, made.measured)
        total += made.counts
    return total


def derive_after(
    connection: Connection,
    *,
    sites: Collection[int] = (),
    meters: Collection[int] = (),
    classes: Iterable[str | None] = (),
) -> Derived:
    """Derive what a changed register touches.

    Parameters
    ----------
    sites : collection of int
        Sites at which something changed: all their months are derived anew.
    meters : collection of int
        Meters whose connection, feeder or class changed: the energy that is spread by them, too.
    classes : iterable of str or None
        Classes that meters were taken out of.
    """
    renewed = spread.renew(connection, spread.months_of_meters(connection, meters), classes)
    where = held_readings.sites_of_series(connection, sorted({series for series, _ in renewed}))
    changed = {(site, month) for series, month in renewed for site in where.get(series, ())}
    return derive_sites(connection, changed | on_sites.months_of_sites(connection, sites))


def derive_all(connection: Connection) -> Derived:
    """Derive every load anew, as when the rules or the program changed."""
    return derive_after(connection, sites=[site["id"] for site in fleet.sites(connection)])


def site_loads(
    connection: Connection, site_months: Iterable[tuple[int, int]]
) -> Iterator[SiteMonths]:
    """Yield the load of sites as the store's readings give it, some sites and a month at a time.

    Reading stays in this thread, computing goes beside it.
    """
    with ThreadPoolExecutor(WORKERS) as pool:
        begun = _in_threads(pool, _begun, batches(connection, site_months))
        looked = ((work, _blocks_beside(connection, work)) for work in begun)
        for made in _in_threads(pool, _finished, looked):
            yield from made


def _in_threads(
    pool: ThreadPoolExecutor, make: Callable[[Given], Made], given: Iterable[Given]
) -> Iterator[Made]:
    """Yield what is made of each, in order, while the next are being made."""
    waiting: deque[Future[Made]] = deque()
    for each in given:
        waiting.append(pool.submit(make, each))
        if len(waiting) > WORKERS:
            yield waiting.popleft().result()
    while waiting:
        yield waiting.popleft().result()


# --- Reading ----------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Batch:
    """Some sites, the months wanted of each, and all that is held of them in those months."""

    sites_of_month: Mapping[int, Sequence[int]]
    facts: SiteFacts
    held: Held


def batches(connection: Connection, site_months: Iterable[tuple[int, int]]) -> Iterator[Batch]:
    """Cut the work into batches of about equal size, and read what each needs."""
    months_of: dict[int, set[int]] = {}
    for site, month in site_months:
        months_of.setdefault(site, set()).add(month)
    sites = sorted(months_of)
    rules = reading_rules(connection)
    lit_months: set[int] | None = None
    first, n_site = 0, FIRST_SITES
    while first < len(sites):
        part = sites[first : first + n_site]
        first += n_site
        members = on_sites.site_members(connection, part)
        series = sorted({member.series_key for member in members})
        held: dict[tuple[int, int], dict[str, bytes]] = {}
        for run in _runs({month for site in part for month in months_of[site]}):
            held |= blocks_of(connection, series, run)
        sites_of_month: dict[int, list[int]] = {}
        for site in part:
            for month in months_of[site]:
                sites_of_month.setdefault(month, []).append(site)
        unmetered = {each.site_key: each for each in on_sites.unmetered(connection, part)}
        if unmetered and lit_months is None:
            lit_months = set(held_readings.load_months(connection))
        standing = on_sites.standing_units(connection, part)
        facts = SiteFacts(
            Members.of(members),
            standing,
            Spans.of(standing),
            unmetered,
            rules,
            lit_months or (),
        )
        yield Batch(dict(sorted(sites_of_month.items())), facts, held)
        n_bytes = sum(len(block) for blocks in held.values() for block in blocks.values())
        n_site = min(max(int(BYTES_A_BATCH * len(part) / max(n_bytes, 1)), 1), MOST_SITES)


def _runs(months: Collection[int]) -> Iterator[tuple[int, int]]:
    """Yield stretches of months without a gap: (first, last)."""
    wanted = sorted(months)
    start = 0
    for place, month in enumerate(wanted):
        if place + 1 == len(wanted) or wanted[place + 1] != month + 1:
            yield wanted[start], month
            start = place + 1


def blocks_of(
    connection: Connection, series: Sequence[int], months: tuple[int, int]
) -> dict[tuple[int, int], dict[str, bytes]]:
    """Return all that series hold in a stretch of months, spread monthly energy included."""
    held: dict[tuple[int, int], dict[str, bytes]] = {}
    for key, month, quantity, payload in held_readings.load_blocks(connection, series, months):
        held.setdefault((key, month), {})[quantity] = payload
    for key, month, payload in energy.spread_blocks(connection, series, months):
        held.setdefault((key, month), {})[SPREAD] = payload
    return held


def _blocks_beside(connection: Connection, work: _Work) -> dict[tuple[int, int], dict[str, bytes]]:
    """Read the months beside those that have gaps: first the one that could close a gap, and where it
    is held the one on the other side too, for its like days."""
    beside: dict[tuple[int, int], dict[str, bytes]] = {}
    others: set[tuple[int, int]] = set()
    for each in work.gapped:
        month = each.loads.month
        for by, open_ in ((-1, each.gaps.opens), (1, each.gaps.closes)):
            rows = each.gaps.rows[open_ | each.gaps.inside].tolist()
            keys = {each.loads.members.rows[row].series_key for row in rows}
            _read_beside(connection, work.batch.held, beside, keys, month + by)
            others |= {
                (key, month - by)
                for key in keys
                if (key, month + by) in beside or (key, month + by) in work.batch.held
            }
    for month in {month for _, month in others}:
        keys = {key for key, at in others if at == month}
        _read_beside(connection, work.batch.held, beside, keys, month)
    return beside


def _read_beside(
    connection: Connection,
    held: Held,
    beside: dict[tuple[int, int], dict[str, bytes]],
    keys: Collection[int],
    month: int,
) -> None:
    """Read a month of series, as far as it is not known yet."""
    wanted = sorted(key for key in keys if (key, month) not in held and (key, month) not in beside)
    if wanted:
        beside |= blocks_of(connection, wanted, (month, month))


# --- Computing --------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class _Gapped:
    """Sites of one month and step that have gaps to fill before they are summed."""

    sites: Sequence[int]
    bounds: NDArray[np.int64]
    loads: MemberLoads
    gaps: Gaps


@dataclass(frozen=True, slots=True)
class _Work:
    """A batch half done: what needed nothing more, and what waits for the months beside it."""

    batch: Batch
    done: list[SiteMonths]
    gapped: list[_Gapped]


def _begun(batch: Batch) -> _Work:
    work = _Work(batch, [], [])
    for month, sites in batch.sites_of_month.items():
        known: set[int] = set()
        for step, places in by_step(batch, month, sites).items():
            known.update(places)
            members, bounds = members_in(batch.facts, places, month)
            loads = member_loads(members, month, step, batch.held, batch.facts)
            gaps = found_gaps(loads, batch.facts.rules)
            if len(gaps.rows):
                work.gapped.append(_Gapped(places, bounds, loads, gaps))
            else:
                work.done.append(_summed(batch, places, bounds, loads))
        nothing: dict[int, bytes | None] = {site: None for site in sites if site not in known}
        if nothing:
            work.done.append(SiteMonths(month, nothing, {}, Derived(len(nothing))))
    return work


def by_step(batch: Batch, month: int, sites: Sequence[int]) -> dict[int, list[int]]:
    """Return the sites that something is held of in a month, by the step of their load [min]."""
    members = batch.facts.members
    steps: dict[int, int] = {}
    here = members.spans.in_month(month).tolist()
    step_of_length: dict[int, int] = {}
    for row, site, counts in zip(members.rows, members.spans.site.tolist(), here, strict=True):
        blocks = batch.held.get((row.series_key, month)) if counts else None
        for block in blocks.values() if blocks else ():
            step = step_of_length.get(len(block))
            if step is None:
                step = step_of_length[len(block)] = step_of(block)
            steps[site] = math.gcd(steps.get(site, 0), step)
    if month in batch.facts.lit_months:
        for site in batch.facts.unmetered:
            steps.setdefault(site, 60)
    found: dict[int, list[int]] = {}
    for site in sites:
        if site in steps:
            found.setdefault(steps[site], []).append(site)
    return found


def members_in(
    facts: SiteFacts, sites: Sequence[int], month: int
) -> tuple[Members, NDArray[np.int64]]:
    """Return the members that hang on some sites in any part of a month, and where each site's begin.

    `sites` are in order of their keys, as the members are.
    """
    wanted = np.array(sites, dtype=np.int64)
    own = facts.members.spans.site
    place = np.minimum(np.searchsorted(wanted, own), len(wanted) - 1)
    rows = np.flatnonzero(facts.members.spans.in_month(month) & (wanted[place] == own))
    members = facts.members.take(rows)
    ends = np.searchsorted(members.spans.site, wanted, side="right")
    return members, np.concatenate([[0], ends])


def _finished(given: tuple[_Work, Held]) -> list[SiteMonths]:
    work, beside = given
    held = {**work.batch.held, **beside} if work.gapped else {}
    made = list(work.done)
    for each in work.gapped:
        _fill(each, held, work.batch.facts)
        made.append(_summed(work.batch, each.sites, each.bounds, each.loads))
    return made


def _fill(each: _Gapped, held: Held, facts: SiteFacts) -> None:
    """Fill the gaps of a month from itself and from the months beside it."""
    month, gaps = each.loads.month, each.gaps
    keys = [each.loads.members.rows[row].series_key for row in gaps.rows.tolist()]
    before, after = (np.array([(key, month + by) in held for key in keys]) for by in (-1, 1))
    closed = gaps.inside | gaps.short | (gaps.opens & before) | (gaps.closes & after)
    rows = gaps.rows[closed]
    if not len(rows):
        return
    members = each.loads.members.take(rows)
    sides = [
        member_loads(members, month + by, each.loads.step_min, held, facts) if there.any() else None
        for by, there in ((-1, before[closed]), (1, after[closed]))
    ]
    fill(each.loads, rows, sides[0], sides[1], facts.rules)


def _summed(
    batch: Batch, sites: Sequence[int], bounds: NDArray[np.int64], loads: MemberLoads
) -> SiteMonths:
    """Sum the members of sites, and pack what comes out."""
    lay_spread(loads, batch.held)
    unmetered_kw, unmetered_row = _unmetered(batch.facts, sites, loads)
    made = summed(
        bounds, loads, unmetered_kw, unmetered_row, batch.facts.rules.least_measured_pct / 100.0
    )
    complete = made.all_measured & ~_set_aside(loads, bounds)
    known = np.asarray(made.flags.any(axis=1))
    packed = iter(pack(made.load_kva[known], made.flags[known], loads.step_min))
    payloads = {
        site: next(packed) if each else None
        for site, each in zip(sites, known.tolist(), strict=True)
    }
    measured = {
        sites[place]: made.measured[place].tobytes()
        for place in np.flatnonzero(known & ~complete).tolist()
    }
    return SiteMonths(loads.month, payloads, measured, _counts(loads, len(sites), made.n_scaled))


def lay_spread(loads: MemberLoads, held: Held) -> None:
    """Put spread monthly energy where a meter has no reading."""
    payloads = [
        held.get((member.series_key, loads.month), {}).get(SPREAD) for member in loads.members.rows
    ]
    rows = [row for row, payload in enumerate(payloads) if payload is not None]
    if not rows:
        return
    kw, flags = regridded([payloads[row] for row in rows], loads.month, loads.step_min)
    not_read = Quality.FILLED | Quality.LIKE_DAYS
    here = (flags != 0) & ((loads.flags[rows] == 0) | ((loads.flags[rows] & not_read) != 0))
    for values, spread_values in (
        (loads.kw, kw),
        (loads.kvar, kw * loads.members.reactive[rows, np.newaxis]),
        (loads.kva, np.zeros_like(kw)),
    ):
        values[rows] = np.where(here, spread_values, values[rows])
    loads.flags[rows] = np.where(here, flags, loads.flags[rows])


def _set_aside(loads: MemberLoads, bounds: NDArray[np.int64]) -> NDArray[np.bool_]:
    """Say of each site whether a reading of its members was set aside: what is kept of its load then
    tells so, and the months beside it are derived anew with it."""
    n_site = len(bounds) - 1
    if loads.marks is None:
        return np.zeros(n_site, dtype=np.bool_)
    rows = (loads.marks & BEYOND).any(axis=1)
    sites = np.repeat(np.arange(n_site), np.diff(bounds))
    return np.bincount(sites, weights=rows, minlength=n_site) > 0


def _unmetered(
    facts: SiteFacts, sites: Sequence[int], loads: MemberLoads
) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
    """Return the unmetered load of those sites that have any, and where each site's stands [kW]."""
    rows: list[NDArray[np.float64]] = []
    row_of = np.full(len(sites), -1, dtype=np.int64)
    for place, site in enumerate(sites):
        lights = facts.unmetered.get(site)
        if lights is None:
            continue
        load_kw = np.full(loads.flags.shape[1], lights.always_kw)
        if lights.dusk_to_dawn_kw and lights.latitude is not None and lights.longitude is not None:
            load_kw += lights.dusk_to_dawn_kw * dark_share(
                lights.latitude, lights.longitude, loads.month, loads.step_min
            )
        row_of[place] = len(rows)
        rows.append(load_kw)
    return (np.array(rows) if rows else np.zeros((0, loads.flags.shape[1]))), row_of


def _counts(loads: MemberLoads, n_site: int, n_scaled: int) -> Derived:
    """Count what was marked and filled, where the readings count for a site."""
    n_value = loads.flags.shape[1]
    odd_rows = (loads.flags & np.uint8(Quality.FILLED | Quality.LIKE_DAYS)).any(axis=1)
    if loads.marks is not None:
        odd_rows |= loads.marks.any(axis=1)
    odd = np.flatnonzero(odd_rows)
    if not len(odd):
        return Derived(n_site, n_scaled=n_scaled)
    at = np.arange(n_value)
    counts = (at >= loads.places[odd, :1]) & (at < loads.places[odd, 1:])
    flags = np.where(counts, loads.flags[odd], 0)
    marked: dict[str, int] = {}
    if loads.marks is not None:
        marks = np.where(counts, loads.marks[odd], 0)
        found = {rule.name: int(np.count_nonzero(marks & rule.bit)) for rule in RULES}
        marked = {name: n for name, n in found.items() if n}
    return Derived(
        n_site,
        marked,
        int(np.count_nonzero(flags & np.uint8(Quality.FILLED))),
        int(np.count_nonzero(flags & np.uint8(Quality.LIKE_DAYS))),
        n_scaled,
    )
