"""The verbs of the command line for notebooks: pandas frames in and out."""

from __future__ import annotations

import datetime as dt
from pathlib import Path
from typing import Any

import pandas as pd

from tracker.assessment.run import AssessmentSummary, assess
from tracker.assessment.trace import unit_trace
from tracker.errors import InputError
from tracker.intake.files import Kind, intake_options, take_file
from tracker.intake.guide import read_guide
from tracker.intake.report import FileReport
from tracker.planning.doubtful import doubtful_connections, doubts_table
from tracker.planning.priority import priority_list
from tracker.reports.tables import trace_table
from tracker.settings import AssessmentSettings
from tracker.store.schema import open_database

Given = Path | str | pd.DataFrame
GuideGiven = Path | str | None


class TransformerStore:
    """An open store. Use it as a context, or close it when done."""

    def __init__(self, url: str) -> None:
        self.database = open_database(url)

    def __enter__(self) -> TransformerStore:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Close the store."""
        self.database.close()

    def import_units(
        self,
        given: Given,
        *,
        columns: GuideGiven = None,
        timezone: str | None = None,
        dry_run: bool = False,
    ) -> FileReport:
        """Take in a register of units: a file or a frame with the headings of units.csv."""
        return self._take("units", given, columns, dry_run, timezone=timezone)

    def import_connections(
        self,
        given: Given,
        *,
        columns: GuideGiven = None,
        timezone: str | None = None,
        dry_run: bool = False,
    ) -> FileReport:
        """Take in which meter hangs where: a file or a frame with the headings of connections.csv."""
        return self._take("connections", given, columns, dry_run, timezone=timezone)

    def import_loads(
        self,
        given: Given,
        *,
        columns: GuideGiven = None,
        timezone: str | None = None,
        stamps: str | None = None,
        interval: int | None = None,
        power_factor: float | None = None,
        quantity: str | None = None,
        series: str | None = None,
        dry_run: bool = False,
    ) -> FileReport:
        """Take in interval readings.

        Parameters
        ----------
        columns : path, optional
            A column guide; what is said here stands before what it says.
        timezone : str, optional
            IANA zone of stamps that have no offset.
        stamps : {"start", "end"}, optional
            Which end of its interval a stamp marks; the start unless said.
        interval : int, optional
            Interval length [min]; found from the stamps unless said.
        power_factor : float, optional
            Turns kW into kVA where no reactive reading stands beside it; 0.95 unless said.
        quantity : str, optional
            What the cells of the layouts with one row a day or one column a meter are; kwh unless
            said. Of several value columns, the one to take.
        series : {"meter", "unit"}, optional
            What the headings of the layout with one column each are; meter unless said.
        """
        return self._take(
            "loads",
            given,
            columns,
            dry_run,
            timezone=timezone,
            stamps=stamps,
            interval=interval,
            power_factor=power_factor,
            quantity=quantity,
            series=series,
        )

    def import_weather(
        self,
        given: Given,
        *,
        columns: GuideGiven = None,
        timezone: str | None = None,
        stamps: str | None = None,
        interval: int | None = None,
        dry_run: bool = False,
    ) -> FileReport:
        """Take in air temperatures: a file or a frame with the headings of weather.csv."""
        return self._take(
            "weather", given, columns, dry_run, timezone=timezone, stamps=stamps, interval=interval
        )

    def import_monthly(
        self,
        given: Given,
        *,
        columns: GuideGiven = None,
        timezone: str | None = None,
        dry_run: bool = False,
    ) -> FileReport:
        """Take in the energy of meters read once a month, to be spread over its hours."""
        return self._take("monthly", given, columns, dry_run, timezone=timezone)

    def import_unmetered(
        self, given: Given, *, columns: GuideGiven = None, dry_run: bool = False
    ) -> FileReport:
        """Take in load that no meter reads, such as street lights."""
        return self._take("unmetered", given, columns, dry_run)

    def _take(
        self, kind: Kind, given: Given, columns: GuideGiven, dry_run: bool, **options: Any
    ) -> FileReport:
        guide = read_guide(Path(columns)) if columns else None
        checked = intake_options(guide=guide, **options)
        return take_file(self.database, kind, given, checked, dry_run=dry_run)

    def assess(
        self,
        settings: AssessmentSettings | None = None,
        *,
        starts_at: dt.datetime | None = None,
        ends_at: dt.datetime | None = None,
    ) -> AssessmentSummary:
        """Run the thermal model over the fleet and store the figures."""
        _check_zones(starts_at=starts_at, ends_at=ends_at)
        return assess(self.database, settings, starts_at=starts_at, ends_at=ends_at)

    def ranking(self) -> pd.DataFrame:
        """Return the replacement priority list, most urgent first."""
        return priority_list(self.database)

    def doubtful_connections(self, *, feeder: str | None = None) -> pd.DataFrame:
        """Return units whose figures suggest a wrong meter-to-unit connection, with the evidence."""
        return doubts_table(doubtful_connections(self.database, feeder=feeder))

    def trace(
        self,
        unit_id: str,
        *,
        starts_at: dt.datetime | None = None,
        ends_at: dt.datetime | None = None,
    ) -> pd.DataFrame:
        """Return one unit interval by interval."""
        _check_zones(starts_at=starts_at, ends_at=ends_at)
        trace = unit_trace(self.database, unit_id, starts_at=starts_at, ends_at=ends_at)
        return trace_table(trace)


def _check_zones(**moments: dt.datetime | None) -> None:
    """Refuse naive times: they would mean another period on another machine."""
    for name, moment in moments.items():
        if moment is not None and moment.tzinfo is None:
            raise InputError(
                f"{name} = {moment} has no time zone. Give it one, for instance tzinfo=datetime.UTC."
            )
