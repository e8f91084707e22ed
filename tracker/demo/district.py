"""The plan of the invented district: which units stand where, and who hangs on them.

The first units of the plan each tell a story (`_STORIES`), so that even a demo of a few units has
something to find; the others are ordinary streets, farms and shops, some of them loaded on since
they were built.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from tracker.demo.clock import FIRST_DAY, LATITUDE_DEG, LONGITUDE_DEG
from tracker.demo.customers import Customer, Home, Pumps, Quarry, School, Shop
from tracker.demo.weather import HEAT_WAVE_DAY, STATIONS_K
from tracker.fleet.ratings import PREFERRED_RATINGS_KVA

UNITS_A_BLOCK = 240  #: units of four feeders; a larger fleet has more feeders of the same size
EXCHANGE_DAY = HEAT_WAVE_DAY

_FEEDER_NAMES = (
    *("Saltmarsh", "Tannery", "Orchard", "Quarry", "Millrace", "Sheepfold", "Brickworks"),
    *("Heronfield", "Ropewalk", "Lime Pit", "Cold Spring", "Windbreak"),
)
_GRID_DEG = 0.07  # from one feeder's root to the next
_KNOWN_SHARE = 0.09  # units of which a test sheet is at hand


@dataclass(frozen=True, slots=True, kw_only=True)
class UnitRow:
    """A row of units.csv; the fields are its headings."""

    unit_id: str
    site_id: str
    feeder: str
    rated_kva: float
    installed_on: dt.date | None = None
    removed_on: dt.date | None = None
    phases: int = 1
    hv_volts: int | None = None
    lv_volts: int | None = None
    impedance_pct: float | None = None
    winding_rise_c: int | None = None
    cooling: str | None = None
    mounting: str = "pole"
    year_made: int | None = None
    no_load_loss_w: int | None = None
    load_loss_w: int | None = None
    top_oil_rise_c: float | None = None
    hot_spot_rise_c: float | None = None
    oil_exponent: float | None = None
    winding_exponent: float | None = None
    top_oil_time_constant_h: float | None = None
    winding_time_constant_h: float | None = None
    latitude: float
    longitude: float
    customers: int = 0
    critical_customers: int = 0
    weather_station: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Meter:
    """A customer's meter: where it really hangs, and what the utility knows of it."""

    meter_id: str
    customer: Customer
    recorded_site_id: str
    multiplier: int = 1
    starts_on: dt.date | None = None
    reads: bool = True
    outages_h: tuple[tuple[dt.date, float, float], ...] = ()  #: day, hour of the day, hours


@dataclass(frozen=True, slots=True)
class Site:
    """A place on a feeder: the units that stood there and the meters that hang there."""

    index: int
    units: tuple[UnitRow, ...]
    meters: tuple[Meter, ...]


@dataclass(slots=True)
class _Story:
    """What is decided about a site before its figures are drawn."""

    customers: list[Customer]
    rated_kva: float
    phases: int = 1
    multiplier: int = 1
    critical: int = 0
    nameplate: bool = False
    winding_rise_c: int | None = None
    year_made: int | None = None
    successor_kva: float | None = None
    silent_meters: int = 0
    outage: bool = False
    newcomer: bool = False


def _home(rng: np.random.Generator, **known: Any) -> Home:
    """Draw a home; cars come one by one over the years, roofs are there from the start."""
    size, cooling_from, cooling, heat_pump, car, came, charger, roof, roof_kw = rng.random(9)
    drawn = Home(
        size=0.85 + 0.5 * size,
        cooling_from_c=20.0 + 3.0 * cooling_from,
        cooling_kw=3.2 + 1.8 * cooling,
        heat_pump=bool(heat_pump < 0.25),
        charging_from_day=int(-120 + 1300 * came) if car < 0.34 else None,
        charger_kw=(3.6, 7.2, 7.2, 9.6)[int(4 * charger)],
        solar_kw=round(3.0 + 6.0 * roof_kw, 1) if roof < 0.09 else 0.0,
    )
    return replace(drawn, **known)


def _homes(rng: np.random.Generator, n_home: int, **known: Any) -> list[Customer]:
    return [_home(rng, **known) for _ in range(n_home)]


def _charging_street(rng: np.random.Generator) -> _Story:
    homes: list[Customer] = [
        _home(rng, charging_from_day=-40 + 36 * nth, charger_kw=6.0, solar_kw=0.0)
        for nth in range(6)
    ]
    return _Story(homes, 25, nameplate=True, winding_rise_c=65, year_made=1994)


def _exchanged(rng: np.random.Generator) -> _Story:
    return _Story(_homes(rng, 8), 25, successor_kva=50, year_made=1979, winding_rise_c=65)


def _solar_street(rng: np.random.Generator) -> _Story:
    homes = _homes(rng, 2) + _homes(rng, 5, solar_kw=8.2)
    return _Story(homes, 50, nameplate=True, year_made=2016, outage=True)


def _old_unit(rng: np.random.Generator) -> _Story:
    return _Story(_homes(rng, 7, solar_kw=0.0), 25, winding_rise_c=55, year_made=1961)


#: Stories of the first units, in their order; feeders take turns, see `feeder_of`.
_STORIES: dict[int, Callable[[np.random.Generator], _Story]] = {
    0: _charging_street,
    1: lambda rng: _Story(_homes(rng, 4, solar_kw=0.0), 25, year_made=1988),  # crossed with 5
    2: lambda _: _Story([Pumps(43.0, 2)], 75, phases=3, nameplate=True, year_made=2003),
    3: _exchanged,
    4: _solar_street,
    5: lambda _: _Story([Shop(25.0)], 37.5, year_made=2009),  # crossed with 1
    6: _old_unit,
    7: lambda rng: _Story(_homes(rng, 6), 37.5, silent_meters=1),
    9: lambda _: _Story([School(250.0)], 300, phases=3, multiplier=40, critical=1, nameplate=True),
    10: lambda _: _Story([Pumps(30.0, 3), Shop(9.0)], 112.5, phases=3, year_made=1998),
    11: lambda _: _Story([Quarry(330.0)], 500, phases=3, multiplier=80, nameplate=True),
    12: lambda rng: _Story(_homes(rng, 5), 25, newcomer=True),
    14: lambda rng: _Story(_homes(rng, 3), 15, winding_rise_c=55, year_made=1957, nameplate=True),
}
_CROSSED = (1, 5)


def _ordinary(index: int, rng: np.random.Generator) -> _Story:
    """Draw a site without a story of its own, and a rating as its planner would have chosen."""
    kind, many, margin, old, year, known, grown = rng.random(7)
    feeder = index % 4
    phases, multiplier, customers = 1, 1, list[Customer]()
    if feeder == 2 and kind < 0.22:
        customers = [Pumps(float(rng.choice([18.0, 24.0, 32.0])), int(1 + 2 * many))]
        phases = 3
    elif feeder == 1 and kind < 0.15:
        customers = [Shop(float(14 + 10 * rng.random())) for _ in range(int(2 + 5 * many))]
        phases = 3
    elif feeder == 3 and kind < 0.04:
        customers, phases, multiplier = [Quarry(float(120 + 80 * many))], 3, 40
    elif kind < 0.06:
        customers = [Shop(float(16 + 10 * many))]
    else:
        customers = _homes(rng, int(1 + 12 * many**1.1))
    # Planned so that the peak of its day came to 70 to 106 % of the rating; some grew since.
    planned_pu = 0.70 + 0.36 * margin
    if grown < 0.13:
        planned_pu += 0.36
    peak_kva = sum(_planned_kva(customer, len(customers)) for customer in customers)
    return _Story(
        customers,
        _rating_for(peak_kva, planned_pu, phases),
        phases=phases,
        multiplier=multiplier,
        critical=int(rng.random() < 0.05),
        nameplate=bool(known < _KNOWN_SHARE),
        winding_rise_c=55 if old < 0.1 else 65 if old < 0.45 else None,
        year_made=None if year < 0.4 else int(1951 + 14 * year if old < 0.1 else 1930 + 93 * year),
        silent_meters=int(rng.random() < 0.02),
    )


def _planned_kva(customer: Customer, n_beside: int) -> float:
    """Return a customer's share of the peak as planned [kVA]; homes do not peak at once."""
    match customer:
        case Home():
            return 4.3 + 3.4 / float(np.sqrt(n_beside))
        case Shop():
            return 0.95 * customer.busy_kw
        case School():
            return customer.teaching_kw
        case Pumps():
            return customer.pump_kw * customer.n_pump / 0.95
        case Quarry():
            return customer.crusher_kw


def _rating_for(peak_kva: float, planned_pu: float, phases: int) -> float:
    """Return the smallest preferred rating that the peak loads to no more than `planned_pu`."""
    ratings = PREFERRED_RATINGS_KVA[phases]
    smallest = 10 if phases == 1 else 30
    return next(
        (kva for kva in ratings if kva >= smallest and kva * planned_pu >= peak_kva), ratings[-1]
    )


def feeder_of(index: int) -> tuple[int, str]:
    """Return the number and the name of the feeder of a site; sites take turns.

    Examples
    --------
    >>> [feeder_of(index) for index in (0, 3, 5)]
    [(11, 'Saltmarsh'), (22, 'Quarry'), (12, 'Tannery')]
    """
    nth = index // UNITS_A_BLOCK * 4 + index % 4
    return 10 * (nth // 2 + 1) + nth % 2 + 1, _FEEDER_NAMES[nth % len(_FEEDER_NAMES)]


def _number_on_feeder(index: int) -> int:
    """Return the number of a site along its feeder, 1 to 199: scattered, and no two alike."""
    return 1 + (index % UNITS_A_BLOCK // 4 * 37 + 46) % 199


def site_id_of(index: int) -> str:
    """Return the id of a site, like `S-11-0047`."""
    return f"S-{feeder_of(index)[0]}-{_number_on_feeder(index):04d}"


def _place(index: int, rng: np.random.Generator) -> tuple[float, float]:
    """Return latitude and longitude: a trunk from the substation, a lateral at every sixth site."""
    nth = index // UNITS_A_BLOCK * 4 + index % 4
    block = nth // 4
    heading = np.deg2rad((35.0, 128.0, 215.0, 300.0)[nth % 4])
    lateral, along_lateral = divmod(_number_on_feeder(index), 6)
    trunk_deg = 0.004 + 0.0017 * lateral
    side_deg = 0.0014 * along_lateral * (1 if lateral % 2 else -1)
    bend = 0.25 * np.sin(lateral / 7.0 + nth)
    north = trunk_deg * np.cos(heading + bend) - side_deg * np.sin(heading)
    east = trunk_deg * np.sin(heading + bend) + side_deg * np.cos(heading)
    wobble = 0.0002 * rng.standard_normal(2)
    return (
        round(LATITUDE_DEG + _GRID_DEG * 2 * (block // 21) + north + wobble[0], 5),
        round(LONGITUDE_DEG + _GRID_DEG * 2 * (block % 21) + 1.27 * east + wobble[1], 5),
    )


def _nameplate(row: UnitRow, rng: np.random.Generator) -> UnitRow:
    """Return the row with what a test sheet says."""
    no_load_w = 5.6 * row.rated_kva**0.76 * (1.25 if row.phases == 3 else 1.0)
    ratio = 3.4 + 1.8 * rng.random()
    rise_c = row.winding_rise_c or 65
    top_oil_rise_c = round(rise_c - 12.0 + 3.0 * rng.random(), 1)
    return replace(
        row,
        hv_volts=12_470 if row.phases == 3 else 7_200,
        lv_volts=(480 if row.rated_kva >= 300 else 208) if row.phases == 3 else 240,
        impedance_pct=round((1.6 if row.phases == 1 else 2.4) + 1.2 * rng.random(), 2),
        winding_rise_c=rise_c,
        cooling="ONAN",
        no_load_loss_w=round(no_load_w),
        load_loss_w=round(no_load_w * ratio),
        top_oil_rise_c=top_oil_rise_c,
        hot_spot_rise_c=round(top_oil_rise_c + rise_c * 0.4 + 2.0 * rng.random() - 1.0, 1),
        oil_exponent=0.8,
        winding_exponent=0.8,
        top_oil_time_constant_h=round(3.0 + 3.5 * rng.random(), 1),
        winding_time_constant_h=0.08,
        year_made=row.year_made or int(2004 + 18 * rng.random()),
    )


def _meter_id(nth: int) -> str:
    """Return the id of the nth meter of the district; numbers are scattered, and no two alike."""
    return f"M-{(nth * 7_919 + 1_204_511) % 10_000_000:07d}"


def _outages(rng: np.random.Generator) -> tuple[tuple[dt.date, float, float], ...]:
    """Draw the times without readings of an ordinary meter: hours to days, once in some years."""
    happens, day, hour, length = rng.random((4, 4))
    return tuple(
        (
            dt.date(FIRST_DAY.year + year, 1, 1) + dt.timedelta(days=int(365 * day[year])),
            float(int(24 * hour[year])),
            float(round(2 * 48 ** length[year])),
        )
        for year in range(4)
        if happens[year] < 0.12
    )


def plan_district(n_site: int, random_state: int) -> list[Site]:
    """Return the plan of the first `n_site` sites; the same state gives the same district.

    Two meters are written down at each other's site, if the plan reaches both.
    """
    sites: list[Site] = []
    n_meter = 0
    for index in range(n_site):
        crossed = index in _CROSSED and n_site > max(_CROSSED)
        sites.append(_plan_site(index, n_meter, random_state, crossed=crossed))
        n_meter += len(sites[-1].meters)
    return sites


def _plan_site(index: int, meters_before: int, random_state: int, *, crossed: bool) -> Site:
    rng = np.random.default_rng((random_state, 1, index))
    story = _STORIES[index](rng) if index in _STORIES else _ordinary(index, rng)
    number, name = feeder_of(index)
    site_id = site_id_of(index)
    latitude, longitude = _place(index, rng)
    on_a_pad = story.phases == 3 or story.rated_kva >= 75 or rng.random() < 0.15
    row = UnitRow(
        unit_id=f"LK-{number}-{_number_on_feeder(index):04d}",
        site_id=site_id,
        feeder=f"LK-{number} {name}",
        rated_kva=story.rated_kva,
        phases=story.phases,
        mounting="pad" if on_a_pad else "pole",
        winding_rise_c=story.winding_rise_c,
        year_made=story.year_made,
        latitude=latitude,
        longitude=longitude,
        customers=len(story.customers),
        critical_customers=story.critical,
        weather_station=list(STATIONS_K)[number // 10 % 2 == 0],
    )
    if story.nameplate:
        row = _nameplate(row, rng)
    units: tuple[UnitRow, ...] = (row,)
    if story.successor_kva is not None:
        successor = replace(
            row,
            unit_id=f"LK-{number}-{_number_on_feeder(index) + 200:04d}",
            rated_kva=story.successor_kva,
            installed_on=EXCHANGE_DAY,
            winding_rise_c=65,
            year_made=EXCHANGE_DAY.year,
        )
        units = (replace(row, removed_on=EXCHANGE_DAY), _nameplate(successor, rng))

    recorded_sites = [site_id] * len(story.customers)
    if crossed:
        recorded_sites[0] = site_id_of(sum(_CROSSED) - index)
    meters = tuple(
        Meter(
            meter_id=_meter_id(meters_before + nth),
            customer=customer,
            recorded_site_id=recorded_sites[nth],
            multiplier=story.multiplier,
            starts_on=dt.date(2025, 4, 14) if story.newcomer and nth == 1 else None,
            reads=nth >= story.silent_meters,
            outages_h=_outages(rng)
            + (((HEAT_WAVE_DAY, 9.0, 31.0),) if story.outage and nth == 0 else ()),
        )
        for nth, customer in enumerate(story.customers)
    )
    return Site(index, units, meters)
