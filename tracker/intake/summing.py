"""The sum of what hangs on a site, in kVA, and the share of it that was measured.

Active and reactive power are summed with their signs over the meters of a site, so that export counts
against use; what was read without an angle is added to their magnitude. What is measured at the
transformer itself stands before the sum. Where a meter is missing, the site is scaled by the others
when they carry most of its energy, and is left missing otherwise.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numba import njit
from numpy.typing import NDArray

from tracker.electrical.power import reactive_per_active
from tracker.intake.member_load import MemberLoads
from tracker.intake.validation import FROM_PYTHON
from tracker.settings import DEFAULT_POWER_FACTOR
from tracker.store.blocks import FlagArray, Float32Array, Quality
from tracker.store.measured import ALL_MEASURED

_SCALED = int(Quality.SCALED)
_FILLED = int(Quality.FILLED | Quality.LIKE_DAYS)
_NOT_READ = int(Quality.FILLED | Quality.LIKE_DAYS | Quality.SPREAD)
_NOT_MEASURED = int(_NOT_READ | Quality.ESTIMATED)
_UNMETERED = int(Quality.HELD | Quality.ESTIMATED)
_REACTIVE_OF_UNMETERED = float(reactive_per_active(DEFAULT_POWER_FACTOR))
_SIZE_OF_UNMETERED = math.sqrt(1.0 + _REACTIVE_OF_UNMETERED**2)


@dataclass(frozen=True, slots=True)
class SiteLoads:
    """Loads of sites in one month; arrays of shape (n_site, n_value)."""

    load_kva: Float32Array  #: NaN where nothing is known
    flags: FlagArray
    all_measured: NDArray[np.bool_]  #: shape (n_site,)
    measured: NDArray[np.uint8]  #: share of the energy that was measured [1/200]; 0 where unknown
    n_scaled: int


def summed(
    bounds: NDArray[np.int64],
    loads: MemberLoads,
    unmetered_kw: NDArray[np.float64],
    unmetered_row: NDArray[np.int64],
    least_measured: float,
) -> SiteLoads:
    """Sum the members of each site, place by place, in float64 and in the order given.

    Parameters
    ----------
    bounds : int64, shape (n_site + 1,)
        Where each site's members begin.
    unmetered_kw : float64, shape (n, n_value)
        Load that no meter reads. [kW]
    unmetered_row : int64, shape (n_site,)
        Its row of each site; -1 where there is none.
    least_measured : float
        Share of the energy that must be measured before the rest is scaled from it.
    """
    shape = len(bounds) - 1, loads.flags.shape[1]
    load_kva = np.full(shape, np.nan, dtype=np.float32)
    flags = np.zeros(shape, dtype=np.uint8)
    measured = np.zeros(shape, dtype=np.uint8)
    # Made here and passed in, as is the room for the sums: arrays made inside compile slowly.
    n_scaled = _sum_sites(
        bounds,
        loads.kw,
        loads.kvar,
        loads.kva,
        loads.flags,
        loads.places,
        loads.members.multiplier,
        loads.members.whole_site,
        unmetered_kw,
        unmetered_row,
        least_measured,
        load_kva,
        flags,
        measured,
        np.zeros(len(loads.members)),
        np.empty((_N_SUMS, shape[1])),
    )
    all_measured = ((flags == 0) | (measured == ALL_MEASURED)).all(axis=1)
    return SiteLoads(load_kva, flags, all_measured, measured, int(n_scaled))


#: A part of `_sum_sites`, called from there alone. What makes a function callable from Python takes as
#: long to compile as the function itself.
_PART: dict[str, Any] = {"no_cpython_wrapper": True, **FROM_PYTHON}
_part = njit(nogil=True, **_PART)

#: Rows of the sums of a site: active [kW], reactive [kvar], read without an angle [kVA]; weight of the
#: meters that are connected, that have a value, whose value was read; size of all that is summed and
#: of what of it was measured [kVA]; members that are connected.
_ACTIVE, _REACTIVE, _APPARENT, _CONNECTED, _KNOWN, _READ, _SIZE, _MEASURED, _MEMBERS, _N_SUMS = (
    range(10)
)


@njit(cache=True, nogil=True, **FROM_PYTHON)
def _sum_sites(  # type: ignore[no-untyped-def]
    bounds,
    kw,
    kvar,
    kva,
    flags,
    places,
    multiplier,
    whole_site,
    unmetered_kw,
    unmetered_row,
    least,
    load,
    site_flags,
    measured,
    weight,
    sums,
):
    """Sum all sites, one after the other; `weight` and `sums` are room to work in."""
    n_scaled = 0
    for site in range(len(bounds) - 1):
        first, last = bounds[site], bounds[site + 1]
        row = unmetered_row[site]
        whole = row < 0 and _is_whole(flags, places, first, last)
        _empty(sums, _APPARENT + 1 if whole else _N_SUMS)
        if whole:
            for m in range(first, last):
                if not whole_site[m]:
                    _add_whole(sums, site_flags, site, m, places, kw, kvar, kva, flags, multiplier)
            _close_whole(sums, load, site_flags, measured, site)
        else:
            _weigh(weight, kw, kvar, kva, flags, multiplier, whole_site, first, last)
            for m in range(first, last):
                if whole_site[m]:
                    _note(sums, m, places)
                else:
                    _add(
                        sums, site_flags, site, m, places, kw, kvar, kva, flags, multiplier, weight
                    )
            n_scaled += _close(sums, load, site_flags, measured, site, unmetered_kw, row, least)
        for m in range(first, last):
            if whole_site[m]:
                _lay_over(load, site_flags, measured, site, m, places, kw, kvar, kva, flags)
    return n_scaled


@_part
def _empty(sums, n_row):  # type: ignore[no-untyped-def]
    for row in range(n_row):
        for t in range(sums.shape[1]):
            sums[row, t] = 0.0


@_part
def _note(sums, m, places):  # type: ignore[no-untyped-def]
    """Note where a member is connected whose own reading is laid over the sum later."""
    for t in range(places[m, 0], places[m, 1]):
        sums[_MEMBERS, t] += 1.0


@_part
def _is_whole(flags, places, first, last):  # type: ignore[no-untyped-def]
    """Say whether every member was measured wherever it is connected: the usual case."""
    for m in range(first, last):
        for t in range(places[m, 0], places[m, 1]):
            if not flags[m, t] or flags[m, t] & _NOT_MEASURED:
                return False
    return True


@_part
def _add_whole(  # type: ignore[no-untyped-def]
    sums, site_flags, site, m, places, kw, kvar, kva, flags, multiplier
):
    """Add a meter that was measured all the time. Whole arrays, because views compile slowly."""
    times = multiplier[m]
    for t in range(places[m, 0], places[m, 1]):
        sums[_ACTIVE, t] += times * kw[m, t]
        sums[_REACTIVE, t] += times * kvar[m, t]
        sums[_APPARENT, t] += times * kva[m, t]
        site_flags[site, t] |= flags[m, t]


@_part
def _close_whole(sums, load, site_flags, measured, site):  # type: ignore[no-untyped-def]
    for t in range(load.shape[1]):
        if site_flags[site, t]:
            active, reactive = sums[_ACTIVE, t], sums[_REACTIVE, t]
            load[site, t] = math.sqrt(active * active + reactive * reactive) + sums[_APPARENT, t]
            measured[site, t] = ALL_MEASURED


@_part
def _add(  # type: ignore[no-untyped-def]
    sums, site_flags, site, m, places, kw, kvar, kva, flags, multiplier, weight
):
    """Add a meter where it has a value, and note what is known of it."""
    times = multiplier[m]
    for t in range(places[m, 0], places[m, 1]):
        sums[_MEMBERS, t] += 1.0
        sums[_CONNECTED, t] += weight[m]
        flag = flags[m, t]
        if not flag:
            continue
        active, reactive, apparent = times * kw[m, t], times * kvar[m, t], times * kva[m, t]
        size = math.sqrt(active * active + reactive * reactive) + apparent
        sums[_ACTIVE, t] += active
        sums[_REACTIVE, t] += reactive
        sums[_APPARENT, t] += apparent
        sums[_KNOWN, t] += weight[m]
        sums[_SIZE, t] += size
        if not flag & _NOT_READ:
            sums[_READ, t] += weight[m]
        if not flag & _NOT_MEASURED:
            sums[_MEASURED, t] += size
        site_flags[site, t] |= flag


@_part
def _close(  # type: ignore[no-untyped-def]
    sums, load, site_flags, measured, site, unmetered_kw, row, least
):
    """Turn sums into load; scale for missing meters, or leave out what too little is known of."""
    n_scaled = 0
    for t in range(load.shape[1]):
        lit = unmetered_kw[row, t] if row >= 0 else 0.0
        if not site_flags[site, t]:
            if row >= 0 and sums[_MEMBERS, t] == 0.0:
                load[site, t] = lit * _SIZE_OF_UNMETERED
                site_flags[site, t] = _UNMETERED
            continue
        scale = 1.0
        if sums[_CONNECTED, t] - sums[_KNOWN, t] > 1e-9 * sums[_CONNECTED, t]:
            # A hair's breadth less, so that exactly the least share is enough whatever the rounding.
            if sums[_READ, t] < (least - 1e-9) * sums[_CONNECTED, t]:
                site_flags[site, t] = 0
                continue
            scale = sums[_CONNECTED, t] / sums[_KNOWN, t]
            site_flags[site, t] |= _SCALED
            n_scaled += 1
        active = scale * sums[_ACTIVE, t] + lit
        reactive = scale * sums[_REACTIVE, t] + lit * _REACTIVE_OF_UNMETERED
        load[site, t] = (
            math.sqrt(active * active + reactive * reactive) + scale * sums[_APPARENT, t]
        )
        whole = scale * sums[_SIZE, t] + lit * _SIZE_OF_UNMETERED
        if scale == 1.0 and lit == 0.0 and not site_flags[site, t] & _NOT_MEASURED:
            measured[site, t] = ALL_MEASURED
        elif whole > 0.0:
            share = ALL_MEASURED * sums[_MEASURED, t] / whole
            most = ALL_MEASURED - 1
            measured[site, t] = most if share > most else np.uint8(share + 0.5)
    return n_scaled


@_part
def _lay_over(  # type: ignore[no-untyped-def]
    load, site_flags, measured, site, m, places, kw, kvar, kva, flags
):
    """What is measured at the transformer stands before the sum of the meters; what is filled, after."""
    for t in range(places[m, 0], places[m, 1]):
        flag = flags[m, t]
        if not flag or (flag & _FILLED and site_flags[site, t]):
            continue
        active, reactive = kw[m, t], kvar[m, t]
        load[site, t] = math.sqrt(active * active + reactive * reactive) + kva[m, t]
        site_flags[site, t] = flag
        measured[site, t] = 0 if flag & _NOT_MEASURED else ALL_MEASURED


@_part
def _weigh(  # type: ignore[no-untyped-def]
    weight, kw, kvar, kva, flags, multiplier, whole_site, first, last
):
    """Give each meter of a site the mean size of what was read of it in the month, filled gaps aside.

    A meter without readings gets the mean weight of the site's others.
    """
    total = 0.0
    n_known = 0
    for m in range(first, last):
        size = 0.0
        n = 0
        for t in range(flags.shape[1]):
            if flags[m, t] and not flags[m, t] & _FILLED:
                size += math.sqrt(kw[m, t] * kw[m, t] + kvar[m, t] * kvar[m, t]) + kva[m, t]
                n += 1
        weight[m] = multiplier[m] * size / n if n else np.nan
        if n and not whole_site[m]:
            total += weight[m]
            n_known += 1
    for m in range(first, last):
        if np.isnan(weight[m]):
            weight[m] = total / n_known if n_known else 0.0
