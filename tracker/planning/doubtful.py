"""Units whose figures suggest that a meter is written down at the wrong transformer.

Each doubt is a hint for the field with its evidence, not a verdict: figures can be odd for good
reasons, and a wrong connection can look ordinary.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import pandas as pd

from tracker.errors import InputError
from tracker.planning.doubt_settings import DoubtSettings
from tracker.planning.moved_meters import Band, Move, Search, moved_meters
from tracker.planning.places import Place, current_places
from tracker.store.engine import Database

#: Said wherever doubts are shown.
NO_VERDICT = (
    "Hints for the field, not verdicts: each says what is odd in the figures. "
    "Look at the meter and the wire before anything is written down anew."
)

#: The kinds of doubt, the most telling first.
MOVED = "meter may hang elsewhere"
IMPOSSIBLE = "load impossible for the rating"
IDLE = "customers without load"
COUNT = "meters per kVA far from the feeder's"
DOUBTS = (MOVED, IMPOSSIBLE, IDLE, COUNT)

DOUBT_COLUMNS = (
    "rank",
    "doubt",
    "unit_id",
    "site_id",
    "feeder",
    "rated_kva",
    "customers",
    "meters",
    "peak_load_pct",
    "meter_id",
    "other_unit_id",
    "other_site_id",
    "peak_load_if_moved_pct",
    "other_peak_load_pct",
    "other_peak_load_if_moved_pct",
    "evidence",
)
FIGURES = (
    "rated_kva",
    "customers",
    "peak_load_pct",
    "peak_load_if_moved_pct",
    "other_peak_load_pct",
    "other_peak_load_if_moved_pct",
)


#: The band of peak load over rating where a fleet is too small to show its own: common practice is a
#: planned peak of some 0.4 to 1.1 of the rating.
USUAL_PEAK_PU = Band(math.log(0.65), 0.35)

#: Units come in steps of ratings, so that no fleet lies closer together than this.
LEAST_SPREAD = 0.25


@dataclass(frozen=True, slots=True)
class Doubt:
    """One unit, what is odd about it, and the figures that say so."""

    kind: str
    place: Place
    strength: float  #: orders doubts of one kind
    evidence: str
    move: Move | None = None


def doubtful_connections(
    database: Database, *, feeder: str | None = None, settings: DoubtSettings | None = None
) -> list[dict[str, Any]]:
    """Find units whose figures suggest a wrong connection, the most telling doubts first.

    Meters that may hang at a neighbouring site come first, then loads impossible for the rating,
    customers without load, and meters per kVA far from the feeder's; within each the strongest
    first, ties by unit id. Judged by the connections in force at the end of the data.

    Parameters
    ----------
    feeder : str, optional
        Only units of this one; they are compared with the whole fleet all the same.

    Returns
    -------
    list of dict
        One row a doubt, of `DOUBT_COLUMNS`; None where a column does not concern a kind of doubt.
        Peak loads are those exceeded in a small share of the hours [%].

    Raises
    ------
    InputError
        If no load is held, or there is no such feeder.
    """
    settings = settings or DoubtSettings()
    with database.reading() as connection:
        period, places = current_places(connection, settings)
        feeders = sorted({place.feeder for place in places if place.feeder is not None})
        if feeder is not None and feeder not in feeders:
            raise InputError(
                f"feeder {feeder!r} is not in the store; there are: {', '.join(feeders) or 'none'}."
            )
        band = _peak_band(places, settings)
        judged = [place for place in places if place.known_h >= settings.least_known_h]
        sites = [*judged, *(place for place in places if not (place.known_h or place.meters))]
        moves = moved_meters(connection, period, sites, Search(band, settings))
    doubts = [
        *(Doubt(MOVED, move.here, move.gain, _move_in_words(move), move) for move in moves),
        *_impossible(judged, settings),
        *_idle(places, settings),
        *_odd_counts(places, band, settings),
    ]
    chosen = [each for each in doubts if feeder is None or each.place.feeder == feeder]
    # An exchange is two doubts of one strength: the meter of the overloaded site comes first.
    chosen.sort(
        key=lambda each: (
            DOUBTS.index(each.kind),
            -each.strength,
            -each.place.peak_pu if each.move else 0.0,
            each.place.unit_id,
        )
    )
    return [{"rank": rank, **_row(doubt)} for rank, doubt in enumerate(chosen, start=1)]


def doubts_table(rows: Sequence[Mapping[str, Any]]) -> pd.DataFrame:
    """Return doubts as a frame of `DOUBT_COLUMNS`."""
    table = pd.DataFrame(list(rows), columns=list(DOUBT_COLUMNS))
    return table.astype(dict.fromkeys(FIGURES, float))


def _row(doubt: Doubt) -> dict[str, Any]:
    place, move = doubt.place, doubt.move
    row: dict[str, Any] = dict.fromkeys(DOUBT_COLUMNS[1:]) | {
        "doubt": doubt.kind,
        "unit_id": place.unit_id,
        "site_id": place.site_id,
        "feeder": place.feeder,
        "rated_kva": place.rated_kva,
        "customers": place.customers,
        "meters": len(place.meters),
        "peak_load_pct": 100 * place.peak_pu if place.known_h else None,
        "evidence": doubt.evidence,
    }
    if move is not None:
        row |= {
            "meter_id": move.meter.meter_id,
            "other_unit_id": move.there.unit_id,
            "other_site_id": move.there.site_id,
            "peak_load_pct": 100 * move.here_pu,
            "peak_load_if_moved_pct": 100 * move.here_after_pu,
            "other_peak_load_pct": 100 * move.there_pu,
            "other_peak_load_if_moved_pct": 100 * move.there_after_pu,
        }
    return row


def _peak_band(places: Sequence[Place], settings: DoubtSettings) -> Band:
    """Return where peak loads lie over the fleet."""
    peaks = [
        place.peak_pu
        for place in places
        if place.known_h >= settings.least_known_h and place.peak_pu > 0
    ]
    if len(peaks) < settings.least_units:
        return USUAL_PEAK_PU
    return Band.of(peaks, LEAST_SPREAD)


# --- The kinds of doubt ---------------------------------------------------------------------------


def _move_in_words(move: Move) -> str:
    """Say what a move would make of two sites, and how the meter compares with its neighbours."""
    here, there, meter = move.here, move.there, move.meter.meter_id
    size = f"{meter} peaks at {move.meter_peak_kva:.3g} kVA"
    if math.isfinite(move.others_peak_kva):
        size += f", the others at {here.site_id} at {move.others_peak_kva:.3g} kVA in the middle"
    away = f", {move.distance_km:.1f} km away" if math.isfinite(move.distance_km) else ""
    hung = f"Were {meter} at {there.site_id} instead"
    if move.exchanged_with is not None:
        hung = (
            f"Were {meter} at {there.site_id} and {move.exchanged_with.meter_id} at {here.site_id}"
        )
    return (
        f"{size}. {here.unit_id} at {here.site_id} ({here.rated_kva:g} kVA, "
        f"{here.meters_per_kva:.2g} meters per kVA) peaks at {100 * move.here_pu:.0f} % of its "
        f"rating, {there.unit_id} at {there.site_id} ({there.rated_kva:g} kVA, "
        f"{there.meters_per_kva:.2g} per kVA{away}) at {100 * move.there_pu:.0f} %. {hung}, they "
        f"would peak at {100 * move.here_after_pu:.0f} % and {100 * move.there_after_pu:.0f} %"
    )


def _impossible(places: Sequence[Place], settings: DoubtSettings) -> Iterator[Doubt]:
    for place in places:
        overload = place.overload
        if overload.days >= settings.impossible_days:
            yield Doubt(
                IMPOSSIBLE,
                place,
                overload.days,
                f"over {settings.impossible_pct:g} % of the rating for {settings.impossible_h:g} h "
                f"or more on {overload.days} days, {overload.most_h:g} h on "
                f"{overload.worst_day}; {_count_in_words(place)}",
            )


def _idle(places: Sequence[Place], settings: DoubtSettings) -> Iterator[Doubt]:
    metered = _metered_feeders(places)
    for place in places:
        customers = place.customers or len(place.meters)
        if not customers or place.measured_whole:
            continue
        if not place.meters:
            if place.feeder in metered:
                yield Doubt(
                    IDLE,
                    place,
                    customers,
                    f"{_plural(customers, 'customer')} in the register, and no meter is connected",
                )
        elif (
            place.known_h >= settings.least_known_h
            and 100 * place.peak_pu < settings.idle_peak_pct
            and place.mean_kva < settings.idle_kva_a_customer * customers
        ):
            yield Doubt(
                IDLE,
                place,
                customers,
                f"{_count_in_words(place)}, yet a mean load of {place.mean_kva:.2g} kVA and a "
                f"peak of {100 * place.peak_pu:.1f} % of the rating",
            )


def _metered_feeders(places: Sequence[Place]) -> set[str | None]:
    """Return the feeders whose sites have meters, most of them: others were not written down at all."""
    sites = Counter(place.feeder for place in places)
    with_meters = Counter(place.feeder for place in places if place.meters)
    return {feeder for feeder, number in sites.items() if 2 * with_meters[feeder] > number}


def _odd_counts(places: Sequence[Place], peaks: Band, settings: DoubtSettings) -> Iterator[Doubt]:
    """Compare meters per kVA along each feeder; few are no doubt where large loads explain them."""
    by_feeder: dict[str, list[Place]] = {}
    for place in places:
        if place.feeder is not None and place.meters:
            by_feeder.setdefault(place.feeder, []).append(place)
    for feeder, own in by_feeder.items():
        if len(own) < settings.least_units:
            continue
        counts = Band.of([place.meters_per_kva for place in own], LEAST_SPREAD)
        for place in own:
            distance = counts.distance(place.meters_per_kva)
            little_load = peaks.distance(place.peak_pu, 1e-6) <= -settings.uncommon
            if distance >= settings.far or (distance <= -settings.far and little_load):
                yield Doubt(
                    COUNT,
                    place,
                    abs(distance),
                    f"{_count_in_words(place)}: {place.meters_per_kva:.2g} meters per kVA, where "
                    f"{feeder} has {counts.usual:.2g} in the middle; {_peak_in_words(place)}",
                )


def _count_in_words(place: Place) -> str:
    words = f"{_plural(len(place.meters), 'meter')} on {place.rated_kva:g} kVA"
    if place.customers is None:
        return words
    return f"{words}, {_plural(place.customers, 'customer')} in the register"


def _plural(number: int, noun: str) -> str:
    return f"{number:,} {noun}{'' if number == 1 else 's'}"


def _peak_in_words(place: Place) -> str:
    if not place.known_h:
        return "no load is known"
    return f"peak load {100 * place.peak_pu:.0f} % of the rating"
