"""Which meter hangs on which site, from when to when."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from zoneinfo import ZoneInfo

import pandas as pd
from sqlalchemy import Connection

from tracker.errors import IntakeError
from tracker.intake.customer_classes import Classes
from tracker.intake.register import Column, read_register
from tracker.intake.report import Fates, Finding, Findings, Outcome
from tracker.intake.site_load import derive_after
from tracker.intake.source import Source
from tracker.intake.stays import NEW, StayBook, span_of
from tracker.store import fleet
from tracker.store import readings as held_readings
from tracker.store.fleet import Span, Stay
from tracker.store.models import MeterConnection

COLUMNS = (
    Column("meter_id", required=True),
    Column("unit_id"),
    Column("site_id"),
    Column("starts_on", "date"),
    Column("ends_on", "date"),
    Column("multiplier", "number", above=0, high=1e6),
    Column("power_factor", "number", above=0, high=1),
    Column("class"),
)


@dataclass(frozen=True, slots=True)
class _Places:
    """Where a connection may lead: sites by id, and the stays of units."""

    sites: Mapping[str, int]
    units: Mapping[str, Sequence[Stay]]

    def site_of(self, site_id: str | None, unit_id: str | None, span: Span) -> int | str:
        """Return the key of the site, or what is wrong."""
        if site_id is not None:
            if site_id in self.sites:
                return self.sites[site_id]
            return f"site {site_id} is in no units file yet; import its unit first"
        if unit_id is None:
            return "neither unit_id nor site_id says where the meter hangs"
        stays = self.units.get(unit_id)
        if not stays:
            return f"unit {unit_id} is not in the store; import units first"
        at_the_time = [stay for stay in stays if stay.span.overlaps(span)]
        return (at_the_time or stays)[-1].site_key


def take_connections(connection: Connection, source: Source, zone: ZoneInfo | None) -> Outcome:
    """Take connections into the store, and derive the load of the sites they touch.

    Raises
    ------
    IntakeError
        If a required heading is missing, or the file cannot be read to its end.
    """
    if not (source.has("unit_id") or source.has("site_id")):
        raise IntakeError(
            f"{source.name}: heading unit_id or site_id is missing; found {', '.join(source.headings)}."
        )
    rows = read_register(source, COLUMNS)
    names = sorted(set(rows.frame["meter_id"]))
    meters = held_readings.series_keys(connection, "meter", names)
    book = StayBook.of(fleet.connections(connection))
    classes = Classes.of(connection, rows.frame, meters)
    frame = rows.frame.drop(index=[finding.ordinal for finding in classes.findings])
    fates, findings = _decided(frame, zone, meters, _places(connection), book, classes)
    fleet.remove_stays(connection, MeterConnection, [stay.key for stay in book.removed])
    fleet.add_connections(connection, book.added)
    former = classes.keep(connection, findings)
    changed = [*book.added, *book.removed]
    derived = derive_after(
        connection,
        sites={stay.site_key for stay in changed},
        meters={*former, *(stay.who for stay in changed)},
        classes=former.values(),
    )
    return Outcome(
        fates,
        Findings.of([*rows.findings, *classes.findings, *findings]),
        source.left_out([column.heading for column in COLUMNS]),
        derived.notes(),
        derived.as_facts(),
    )


def _places(connection: Connection) -> _Places:
    unit_ids = {row["id"]: row["unit_id"] for row in fleet.units(connection)}
    stays: dict[str, list[Stay]] = {}
    for stay in fleet.placements(connection):
        stays.setdefault(unit_ids[stay.who], []).append(stay)
    return _Places({row["site_id"]: row["id"] for row in fleet.sites(connection)}, stays)


def _decided(
    frame: pd.DataFrame,
    zone: ZoneInfo | None,
    meters: Mapping[str, int],
    places: _Places,
    book: StayBook,
    classes: Classes,
) -> tuple[Fates, list[Finding]]:
    """Put each row into the book, or say why not."""
    fates = Fates()
    findings: list[Finding] = []
    site_ids = {key: site_id for site_id, key in places.sites.items()}
    columns = [
        "meter_id",
        "unit_id",
        "site_id",
        "starts_on",
        "ends_on",
        "multiplier",
        "power_factor",
    ]
    for row in frame[columns].itertuples():
        ordinal, meter_id, unit_id, site_id, starts, ends, multiplier, power_factor = row
        span, wrong = span_of(starts, ends, zone)
        if wrong:
            reason = f"the connection of meter {meter_id} {wrong}"
            findings.append(Finding(ordinal, "ends_on", "ends_on.too_early", reason))
            continue
        site = places.site_of(site_id, unit_id, span)
        if isinstance(site, str):
            heading = "site_id" if site_id is not None else "unit_id"
            findings.append(Finding(ordinal, heading, f"{heading}.unknown", site))
            continue
        stay = Stay(
            NEW,
            meters[meter_id],
            site,
            span,
            1.0 if multiplier is None else multiplier,
            power_factor,
        )
        elsewhere = book.clash(stay)
        if elsewhere is not None:
            reason = (
                f"meter {meter_id} hangs on site {site_ids[elsewhere.site_key]} {elsewhere.span}, at "
                "the same time; give that connection an ends_on first"
            )
            findings.append(Finding(ordinal, "meter_id", "meter_id.two_sites", reason))
            continue
        fate = book.put(stay)
        if fate == "unchanged" and classes.changes(ordinal):
            fate = "corrected"
        setattr(fates, fate, getattr(fates, fate) + 1)
    return fates, findings
