"""From meter readings to the load of each site: the sum of what hangs on it, in kVA.

Active power is summed with its sign over the meters of a site, so that export counts against use,
and the magnitude of the net is the load; a power factor turns it into kVA. What is measured at the
transformer itself stands before the sum of the meters. Where a meter is missing, the site is scaled
by the others when they carry most of its energy, and is left missing otherwise.
"""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Iterable, Sequence

import numpy as np
from numba import njit
from sqlalchemy import Connection

from tracker.electrical.power import reactive_per_active
from tracker.intake.merge import regridded
from tracker.settings import DEFAULT_POWER_FACTOR
from tracker.store import readings as held_readings
from tracker.store.blocks import Quality, month_start_s, pack, step_of, values_a_month
from tracker.store.keys import in_parts
from tracker.store.readings import SiteMember

#: Share of a site's energy that must be measured before the rest is scaled from it.
LEAST_MEASURED_SHARE = 0.6

#: Series summed side by side; bounds the memory.
SITES_A_BATCH = 500

_SCALED = int(Quality.SCALED)


def derive(connection: Connection, touched: Iterable[tuple[int, int]]) -> int:
    """Derive the load of every site that a changed block of readings counts for.

    Parameters
    ----------
    touched : iterable of (series key, month)

    Returns
    -------
    n : int
        Number of site-months derived.
    """
    touched = list(touched)
    sites = held_readings.sites_of_series(connection, sorted({series for series, _ in touched}))
    return derive_sites(
        connection,
        {(site, month) for series, month in touched for site in sites.get(series, ())},
    )


def derive_sites(connection: Connection, site_months: Iterable[tuple[int, int]]) -> int:
    """Derive the load of sites anew: {(site key, month)}; return how many."""
    months_of_site: dict[int, list[int]] = {}
    for site, month in sorted(set(site_months)):
        months_of_site.setdefault(site, []).append(month)
    for part in in_parts(list(months_of_site), SITES_A_BATCH):
        members = held_readings.site_members(connection, part)
        sites_of_month: dict[int, list[int]] = {}
        for site in part:
            for month in months_of_site[site]:
                sites_of_month.setdefault(month, []).append(site)
        for month, sites in sites_of_month.items():
            payloads = site_load_payloads(connection, month, sites, members)
            held_readings.replace_site_load(connection, month, payloads)
    return sum(len(months) for months in months_of_site.values())


def site_load_payloads(
    connection: Connection, month: int, sites: Sequence[int], members: Sequence[SiteMember]
) -> dict[int, bytes | None]:
    """Return the packed load of sites for one month; None for those that nothing is known of.

    `members` are all that hang on the sites, in order; those of other sites are passed over.
    """
    wanted = set(sites)
    members = [
        member for member in members if member.site_key in wanted and _overlaps(member, month)
    ]
    series = sorted({member.series_key for member in members})
    active = held_readings.held_blocks(connection, "kw", month, series)
    apparent = held_readings.held_blocks(connection, "kva", month, series)
    by_site: dict[int, list[SiteMember]] = {}
    for member in members:
        by_site.setdefault(member.site_key, []).append(member)
    by_step: dict[int, list[int]] = {}
    payloads: dict[int, bytes | None] = dict.fromkeys(sites)
    for site, own in by_site.items():
        steps = [
            step_of(block)
            for member in own
            for blocks in (active, apparent)
            if (block := blocks.get(member.series_key)) is not None
        ]
        if steps:
            by_step.setdefault(math.gcd(*steps), []).append(site)
    for step, places in by_step.items():
        own = [member for site in places for member in by_site[site]]
        counts = [len(by_site[site]) for site in places]
        packed = _summed(own, counts, month, step, active, apparent)
        payloads |= dict(zip(places, packed, strict=True))
    return payloads


def _overlaps(member: SiteMember, month: int) -> bool:
    return (member.starts_at is None or _seconds(member.starts_at) < month_start_s(month + 1)) and (
        member.ends_at is None or _seconds(member.ends_at) > month_start_s(month)
    )


def _seconds(moment: dt.datetime) -> int:
    return int(moment.timestamp())


def _summed(
    members: Sequence[SiteMember],
    counts: Sequence[int],
    month: int,
    step_min: int,
    active: dict[int, bytes],
    apparent: dict[int, bytes],
) -> list[bytes | None]:
    """Sum the members of sites, given one site after the other; `counts` members each."""
    kw, kw_flags = regridded([active.get(m.series_key) for m in members], month, step_min)
    kva, kva_flags = regridded([apparent.get(m.series_key) for m in members], month, step_min)
    load, flags = _sum_sites(
        np.concatenate(([0], np.cumsum(counts))),
        kw,
        kw_flags,
        kva,
        kva_flags,
        np.array([_places(member, month, step_min) for member in members], dtype=np.int64),
        np.array([member.multiplier for member in members]),
        reactive_per_active([member.power_factor or DEFAULT_POWER_FACTOR for member in members]),
        np.array([member.whole_site for member in members]),
    )
    known = flags.any(axis=1)
    packed = iter(pack(load[known], flags[known], step_min))
    return [next(packed) if each else None for each in known.tolist()]


def _places(member: SiteMember, month: int, step_min: int) -> tuple[int, int]:
    """Return the first place of the month that a member counts in, and the first it does not."""
    start_s, step_s = month_start_s(month), 60 * step_min
    first, last = 0, values_a_month(month, step_min)
    if member.starts_at is not None:
        first = max(first, -(-(_seconds(member.starts_at) - start_s) // step_s))
    if member.ends_at is not None:
        last = min(last, -(-(_seconds(member.ends_at) - start_s) // step_s))
    return first, max(last, first)


@njit(cache=True, nogil=True)
def _sum_sites(  # type: ignore[no-untyped-def]
    bounds, kw, kw_flags, kva, kva_flags, places, multiplier, reactive, whole_site
):
    """Sum the members of each site, place by place, in float64 and in the order given."""
    n_site, n_value = len(bounds) - 1, kw.shape[1]
    load = np.full((n_site, n_value), np.float32(np.nan), np.float32)
    flags = np.zeros((n_site, n_value), np.uint8)
    weight = _mean_sizes(kw, kw_flags, kva, kva_flags, multiplier)
    for site in range(n_site):
        first, last = bounds[site], bounds[site + 1]
        _fill_unknown_weights(weight, whole_site, first, last)
        sums = np.zeros((_N_SUMS, n_value))
        for m in range(first, last):
            if not whole_site[m]:
                _add_meter(
                    sums, flags, site, m, places, kw, kw_flags, kva, kva_flags, multiplier, reactive, weight
                )  # fmt: skip
        _close_sum(sums, load, flags, site)
        for m in range(first, last):
            if whole_site[m]:
                _lay_over(load, flags, site, m, places, kw, kw_flags, kva, kva_flags, reactive)
    return load, flags


#: Rows of the sums of a site: active [kW], reactive [kvar], apparent power read as such [kVA], weight
#: of the meters with a reading, weight of all that are connected.
_ACTIVE, _REACTIVE, _APPARENT, _MEASURED, _CONNECTED, _N_SUMS = range(6)


@njit(cache=True, nogil=True)
def _add_meter(  # type: ignore[no-untyped-def]
    sums, flags, site, m, places, kw, kw_flags, kva, kva_flags, multiplier, reactive, weight
):
    """Add meter `m` where it is connected. Whole arrays, because views of them compile slowly."""
    for t in range(places[m, 0], places[m, 1]):
        sums[_CONNECTED, t] += weight[m]
        if kva_flags[m, t]:
            sums[_APPARENT, t] += kva[m, t] * multiplier[m]
            flags[site, t] |= kva_flags[m, t]
        elif kw_flags[m, t]:
            sums[_ACTIVE, t] += kw[m, t] * multiplier[m]
            sums[_REACTIVE, t] += kw[m, t] * multiplier[m] * reactive[m]
            flags[site, t] |= kw_flags[m, t]
        else:
            continue
        sums[_MEASURED, t] += weight[m]


@njit(cache=True, nogil=True)
def _close_sum(sums, load, flags, site):  # type: ignore[no-untyped-def]
    """Turn sums into load; scale for missing meters, or leave out what too little is known of."""
    for t in range(load.shape[1]):
        if not flags[site, t]:
            continue
        total = math.hypot(sums[_ACTIVE, t], sums[_REACTIVE, t]) + sums[_APPARENT, t]
        missing = sums[_CONNECTED, t] - sums[_MEASURED, t]
        if missing > 1e-9 * sums[_CONNECTED, t]:
            if sums[_MEASURED, t] < LEAST_MEASURED_SHARE * sums[_CONNECTED, t]:
                flags[site, t] = 0
                continue
            total *= sums[_CONNECTED, t] / sums[_MEASURED, t]
            flags[site, t] |= _SCALED
        load[site, t] = total


@njit(cache=True, nogil=True)
def _lay_over(  # type: ignore[no-untyped-def]
    load, flags, site, m, places, kw, kw_flags, kva, kva_flags, reactive
):
    """What is measured at the transformer stands before the sum of the meters."""
    for t in range(places[m, 0], places[m, 1]):
        if kva_flags[m, t]:
            load[site, t] = abs(kva[m, t])
            flags[site, t] = kva_flags[m, t]
        elif kw_flags[m, t]:
            load[site, t] = abs(kw[m, t]) * math.sqrt(1.0 + reactive[m] * reactive[m])
            flags[site, t] = kw_flags[m, t]


@njit(cache=True, nogil=True)
def _mean_sizes(kw, kw_flags, kva, kva_flags, multiplier):  # type: ignore[no-untyped-def]
    """Mean size of each member's readings in the month; NaN where there are none."""
    n_member, n_value = kw.shape
    sizes = np.empty(n_member)
    for m in range(n_member):
        total = 0.0
        n = 0
        for t in range(n_value):
            if kva_flags[m, t]:
                total += abs(kva[m, t])
                n += 1
            elif kw_flags[m, t]:
                total += abs(kw[m, t])
                n += 1
        sizes[m] = multiplier[m] * total / n if n else np.nan
    return sizes


@njit(cache=True, nogil=True)
def _fill_unknown_weights(weight, whole_site, first, last):  # type: ignore[no-untyped-def]
    """Give a meter without readings the mean weight of the site's others."""
    total = 0.0
    n = 0
    for m in range(first, last):
        if not whole_site[m] and not np.isnan(weight[m]):
            total += weight[m]
            n += 1
    for m in range(first, last):
        if np.isnan(weight[m]):
            weight[m] = total / n if n else 0.0
