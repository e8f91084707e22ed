"""Interval readings: the layouts of a loads file, told apart by their headings."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

from sqlalchemy import Connection

from tracker.errors import InputError, IntakeError
from tracker.intake.days import day_step, interval_columns, take_days
from tracker.intake.long import take_long
from tracker.intake.quality import QualityCodes
from tracker.intake.readings import QuantityRule, ReadingOptions, ReadingsIntake
from tracker.intake.report import Outcome
from tracker.intake.source import Source
from tracker.intake.wide import take_wide
from tracker.settings import DEFAULT_POWER_FACTOR
from tracker.store import readings as held_readings

#: Value columns of a loads file. Of two that say the same the earlier is used.
QUANTITIES = {
    "kva": QuantityRule("kva", "kva", lowest=0.0, unit="kVA"),
    "kw": QuantityRule("kw", "kw"),
    "kwh": QuantityRule("kwh", "kw", energy=True, unit="kWh"),
    "kvar": QuantityRule("kvar", "kvar", unit="kvar"),
    "kvarh": QuantityRule("kvarh", "kvar", energy=True, unit="kvarh"),
    "amps_lv": QuantityRule("amps_lv", "amps_lv", lowest=0.0, unit="A"),
    "amps_hv": QuantityRule("amps_hv", "amps_hv", lowest=0.0, unit="A"),
}

#: Headings of the id columns, and the kind of series each names.
ID_HEADINGS = {"meter_id": "meter", "unit_id": "unit"}

#: Meters named in a note; the ledger's report lists all.
NAMED_METERS = 5

LAYOUTS = (
    f"meter_id (or unit_id), read_at and {', '.join(QUANTITIES)}; "
    "or meter_id (or unit_id), date and a column an interval (h01 to h24, or 00:00, 00:15 …); "
    "or read_at and a column for each meter. A column guide names other headings"
)


def take_loads(
    connection: Connection,
    source: Source,
    file_key: int,
    options: ReadingOptions,
    quantity: str | None = None,
    series: str = "meter",
) -> Outcome:
    """Take the readings of one file into the store; the load of sites is derived afterwards.

    Parameters
    ----------
    file_key : int
        The file's entry in the intake ledger.
    quantity : str, optional
        What the cells of the layouts without a value column are, `kwh` unless said; of several value
        columns, the only one to take.
    series : {"meter", "unit"}
        What the headings of the layout with one column each are.

    Raises
    ------
    IntakeError
        If the headings are of no layout, or the file cannot be read to its end.
    InputError
        If an option does not fit the file.
    """
    if quantity is not None and quantity.lower() not in QUANTITIES:
        raise InputError(f"quantity = {quantity!r} is not known; allowed: {', '.join(QUANTITIES)}.")
    asked = None if quantity is None else QUANTITIES[quantity.lower()]
    quality = QualityCodes.of(source.guide)
    ids = [heading for heading in ID_HEADINGS if source.has(heading)]
    values = [rule for rule in QUANTITIES.values() if source.has(rule.heading)]

    def intake_of(kind: str, rules: Sequence[QuantityRule], own: ReadingOptions) -> ReadingsIntake:
        return ReadingsIntake(connection, source.name, file_key, kind, rules, own)

    if len(ids) == 1 and source.has("read_at"):
        rules = [rule for rule in values if asked in (None, rule)]
        if not rules:
            wanted = asked.heading if asked else f"of values; allowed: {', '.join(QUANTITIES)}"
            raise IntakeError(f"{source.name}: there is no column {wanted}.")
        intake = intake_of(ID_HEADINGS[ids[0]], rules, options)
        take_long(source, intake, ids[0], quality)
        used = [ids[0], "read_at", "quality", *(rule.heading for rule in rules)]
    elif len(ids) == 1 and source.has("date"):
        columns = interval_columns(source, source.guide.readings.interval_columns)
        step_min = day_step(source.name, len(columns), options)
        of_day = replace(options, stamps_at_end=False, interval_min=step_min)
        intake = intake_of(ID_HEADINGS[ids[0]], [asked or QUANTITIES["kwh"]], of_day)
        take_days(source, intake, ids[0], columns, quality)
        used = [ids[0], "date", "quality", *columns]
    elif not ids and source.has("read_at") and not values and len(source.headings) > 1:
        intake = intake_of(series, [asked or QUANTITIES["kwh"]], options)
        take_wide(source, intake, quality)
        used = list(source.headings)
    else:
        found = ", ".join(source.headings[:12])
        raise IntakeError(f"{source.name}: headings {found} are of no layout; allowed: {LAYOUTS}.")
    intake.finish()
    facts = _facts(intake)
    return Outcome(
        intake.fates,
        intake.findings,
        source.left_out(used),
        _notes(intake.kind, facts),
        facts,
        intake.touched,
    )


def _facts(intake: ReadingsIntake) -> dict[str, Any]:
    """Return what was found or assumed on the way, for the ledger."""
    facts: dict[str, Any] = {
        "series": len(intake.names),
        "readings_of_interval_min": dict(sorted(intake.readings_of_step.items())),
        "stamps_snapped": intake.snapped,
    }
    needing = intake.needing_power_factor
    if needing.sum():
        given = intake.options.power_factor
        known = held_readings.with_own_power_factor(intake.connection, intake.keys)
        own = int(sum(needing[place] for place, key in enumerate(intake.keys) if key in known))
        facts["readings_by_own_power_factor"] = own
        facts["readings_by_given_power_factor"] = int(needing.sum()) - own if given else 0
        facts["readings_by_assumed_power_factor"] = 0 if given else int(needing.sum()) - own
        facts["power_factor"] = given or DEFAULT_POWER_FACTOR
    if intake.kind == "meter":
        connected = held_readings.connected(intake.connection, intake.keys)
        loose = [
            name
            for name, key in zip(intake.names, intake.keys, strict=False)
            if key not in connected
        ]
        facts["unconnected"] = len(loose)
        facts["unconnected_first"] = loose[:NAMED_METERS]
    return facts


def _notes(kind: str, facts: dict[str, Any]) -> list[str]:
    """Put the facts into words."""
    steps = facts["readings_of_interval_min"]
    notes = [f"{facts['series']:,} {kind}s"]
    if steps:
        notes.append(f"intervals of {' and '.join(map(str, steps))} min")
    if facts["stamps_snapped"]:
        notes.append(f"{facts['stamps_snapped']:,} stamps a little off were set right")
    for how, words in (("own", "its meter's own"), ("given", "the"), ("assumed", "the assumed")):
        count = facts.get(f"readings_by_{how}_power_factor", 0)
        if count:
            figure = "" if how == "own" else f" {facts['power_factor']:g}"
            notes.append(f"kVA of {count:,} readings by {words} power factor{figure}")
    if facts.get("unconnected"):
        names = ", ".join(facts["unconnected_first"])
        more = ", …" if facts["unconnected"] > len(facts["unconnected_first"]) else ""
        notes.append(f"{facts['unconnected']:,} meters hang on no site yet: {names}{more}")
    return notes
