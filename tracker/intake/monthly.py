"""Meters that are read once a month: their energy, month by month."""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from zoneinfo import ZoneInfo

from sqlalchemy import Connection

from tracker.intake.customer_classes import Classes
from tracker.intake.register import Column, read_register
from tracker.intake.report import Fates, Finding, Findings, Outcome
from tracker.intake.site_load import derive_after
from tracker.intake.source import Source
from tracker.store import energy
from tracker.store import readings as held_readings
from tracker.store.energy import MeterEnergy

COLUMNS = (
    Column("meter_id", required=True),
    Column("month", required=True),
    Column("kwh", "number", low=0, high=1e9, required=True),
    Column("class"),
)

MONTH = re.compile(r"(\d{4})-(\d{2})")

NEW = 0  #: key of a row that the store does not hold yet


def take_monthly(
    connection: Connection, source: Source, file_key: int, zone: ZoneInfo | None
) -> Outcome:
    """Take the monthly energy of meters into the store, and spread it over their hours.

    Parameters
    ----------
    zone : ZoneInfo, optional
        Whose calendar months are meant; UTC unless said.

    Raises
    ------
    IntakeError
        If a required heading is missing, or the file cannot be read to its end.
    """
    rows = read_register(source, COLUMNS)
    meters = held_readings.series_keys(connection, "meter", sorted(set(rows.frame["meter_id"])))
    classes = Classes.of(connection, rows.frame, meters)
    frame = rows.frame.drop(index=[finding.ordinal for finding in classes.findings])
    book = _Book(
        energy.monthly_energy(connection, meters.values()), meters, zone or ZoneInfo("UTC")
    )
    fates = Fates()
    findings: list[Finding] = []
    for ordinal, meter_id, month, kwh in frame[["meter_id", "month", "kwh"]].itertuples():
        fate = book.put(ordinal, meter_id, month, kwh)
        if isinstance(fate, Finding):
            findings.append(fate)
            continue
        if fate == "unchanged" and classes.changes(ordinal):
            fate = "corrected"
        setattr(fates, fate, getattr(fates, fate) + 1)
    former = classes.keep(connection, findings)
    energy.replace_energy(connection, book.added, book.former, file_key)
    derived = derive_after(
        connection,
        meters={*former, *(row.meter_key for row in book.added)},
        classes=former.values(),
    )
    return Outcome(
        fates,
        Findings.of([*rows.findings, *classes.findings, *findings]),
        source.left_out([column.heading for column in COLUMNS]),
        [f"{len(meters):,} meters read once a month", *derived.notes()],
        derived.as_facts(),
    )


@dataclass(slots=True)
class _Book:
    """The energy held of the meters of a file, and what the file brings."""

    held: list[MeterEnergy]
    meters: Mapping[str, int]
    zone: ZoneInfo
    added: list[MeterEnergy] = field(default_factory=list)
    former: list[int] = field(default_factory=list)  #: keys of the rows that others replace
    _of_meter: dict[int, list[MeterEnergy]] = field(init=False)

    def __post_init__(self) -> None:
        self._of_meter = {}
        for row in self.held:
            self._of_meter.setdefault(row.meter_key, []).append(row)

    def put(self, ordinal: int, meter_id: str, month: str, kwh: float) -> str | Finding:
        """Note a row; return its fate, or why it cannot be taken."""
        span = _span(month, self.zone)
        if span is None:
            reason = f"month = {month[:40]!r} is no month; allowed: a month such as 2025-07"
            return Finding(ordinal, "month", "month.no_month", reason)
        row = MeterEnergy(NEW, self.meters[meter_id], *span, kwh)
        own = self._of_meter.setdefault(row.meter_key, [])
        for other in own:
            if (other.starts_at, other.ends_at) == span:
                return self._replaced(own, other, row)
            if other.starts_at < row.ends_at and row.starts_at < other.ends_at:
                reason = (
                    f"meter {meter_id} has energy from {other.starts_at:%Y-%m-%d %H:%M} to "
                    f"{other.ends_at:%Y-%m-%d %H:%M} UTC, a month of another time zone; give the "
                    "same --timezone"
                )
                return Finding(ordinal, "month", "month.overlaps", reason)
        own.append(row)
        self.added.append(row)
        return "taken"

    def _replaced(self, own: list[MeterEnergy], other: MeterEnergy, row: MeterEnergy) -> str:
        """Put a row in place of one of the same month."""
        if other.kwh == row.kwh:
            return "unchanged"
        own[own.index(other)] = row
        self.added.append(row)
        if other.key == NEW:
            self.added.remove(other)
        else:
            self.former.append(other.key)
        return "corrected"


def _span(month: str, zone: ZoneInfo) -> tuple[dt.datetime, dt.datetime] | None:
    """Return where a calendar month begins and ends, in UTC; None when the text is no month."""
    match = MONTH.fullmatch(month.strip())
    if match is None or not 1 <= int(match[2]) <= 12 or not 1970 <= int(match[1]) < 2200:
        return None
    year, number = int(match[1]), int(match[2])
    following = dt.date(year + number // 12, number % 12 + 1, 1)
    starts, ends = (_utc(date, zone) for date in (dt.date(year, number, 1), following))
    return starts, ends


def _utc(date: dt.date, zone: ZoneInfo) -> dt.datetime:
    return dt.datetime(date.year, date.month, date.day, tzinfo=zone).astimezone(dt.UTC)
