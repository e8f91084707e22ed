"""Air temperatures of weather stations."""

from __future__ import annotations

from sqlalchemy import Connection

from tracker.errors import IntakeError
from tracker.intake.loads import take_long
from tracker.intake.readings import QuantityRule, ReadingOptions, ReadingsIntake
from tracker.intake.report import FileReport
from tracker.intake.source import Source

STORED_AS = "air_temp_c"

#: Air temperatures ever measured on earth lie well inside.
CELSIUS = QuantityRule("air_temp_c", STORED_AS, lowest=-90.0, highest=70.0, unit="°C")
FAHRENHEIT = QuantityRule("air_temp_f", STORED_AS, lowest=-90.0, highest=70.0, unit="°C")


def take_weather(
    connection: Connection, source: Source, file_key: int, options: ReadingOptions
) -> FileReport:
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
    rule = present[0]
    value = f"TRY_CAST({source.cell_of(rule.heading)} AS DOUBLE)"
    if rule is FAHRENHEIT:
        value = f"({value} - 32) / 1.8"
    id_heading = "station_id" if source.has("station_id") else None
    intake = ReadingsIntake(connection, source.name, file_key, "station", rule, options)
    take_long(source, intake, id_heading, value)
    intake.finish()
    return FileReport(
        source.name,
        "weather",
        intake.fates,
        source.refusals(intake.findings),
        source.left_out(("station_id", "read_at", rule.heading, "quality")),
        [f"{len(intake.names):,} stations"],
    )
