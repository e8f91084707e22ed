"""Air temperatures of weather stations."""

from __future__ import annotations

from sqlalchemy import Connection

from tracker.errors import IntakeError
from tracker.intake.long import take_long
from tracker.intake.quality import QualityCodes
from tracker.intake.readings import QuantityRule, ReadingOptions, ReadingsIntake
from tracker.intake.report import Outcome
from tracker.intake.source import Source

STORED_AS = "air_temp_c"

#: Air temperatures ever measured on earth lie well inside.
CELSIUS = QuantityRule("air_temp_c", STORED_AS, lowest=-90.0, highest=70.0, unit="°C")
FAHRENHEIT = QuantityRule(
    "air_temp_f", STORED_AS, lowest=-130.0, highest=158.0, unit="°F", zero=32.0, factor=1 / 1.8
)


def take_weather(
    connection: Connection, source: Source, file_key: int, options: ReadingOptions
) -> Outcome:
    """Take the temperatures of one file into the store.

    A file without `station_id` is of the only station there is, whose name is blank.

    Raises
    ------
    IntakeError
        If a heading is missing, or the file cannot be read to its end.
    """
    present = [rule for rule in (CELSIUS, FAHRENHEIT) if source.has(rule.heading)]
    if not present or not source.has("read_at"):
        found = ", ".join(source.headings[:12])
        raise IntakeError(
            f"{source.name}: headings {found} are not those of a weather file; "
            "allowed: station_id (optional), read_at, and air_temp_c or air_temp_f."
        )
    id_heading = "station_id" if source.has("station_id") else None
    intake = ReadingsIntake(connection, source.name, file_key, "station", present, options)
    take_long(source, intake, id_heading, QualityCodes.of(source.guide))
    intake.finish()
    used = ["station_id", "read_at", "quality", *(rule.heading for rule in present)]
    facts = {"series": len(intake.names), "stamps_snapped": intake.snapped}
    notes = [f"{len(intake.names):,} stations"]
    return Outcome(intake.fates, intake.findings, source.left_out(used), notes, facts)
