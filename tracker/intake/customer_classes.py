"""The class of customer behind a meter, as register files give it."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass

import pandas as pd
from sqlalchemy import Connection

from tracker.intake.report import Finding
from tracker.store import energy


@dataclass(frozen=True, slots=True)
class Classes:
    """What a file says of classes; a blank says nothing."""

    said: Mapping[int, tuple[int, str]]  #: (meter key, class) by ordinal of the row
    held: Mapping[int, str | None]  #: class before, by meter key
    findings: list[Finding]  #: rows that say other than an earlier one of the same meter

    @classmethod
    def of(cls, connection: Connection, frame: pd.DataFrame, meters: Mapping[str, int]) -> Classes:
        """Read the classes in a frame of meter_id and class; its index are the rows' ordinals."""
        rows = frame.loc[frame["class"].notna(), ["meter_id", "class"]]
        first = rows.groupby("meter_id", sort=False)["class"].transform("first")
        findings = [
            Finding(
                int(ordinal),
                "class",
                "class.two_values",
                f"class = {rows.loc[ordinal, 'class']} contradicts an earlier row of meter "
                f"{rows.loc[ordinal, 'meter_id']}, which says {first[ordinal]}",
            )
            for ordinal in rows.index[rows["class"] != first]
        ]
        said = {
            int(ordinal): (meters[meter_id], text)
            for ordinal, meter_id, text in rows[rows["class"] == first].itertuples()
        }
        return cls(said, energy.classes(connection, {key for key, _ in said.values()}), findings)

    def changes(self, ordinal: int) -> bool:
        """Say whether a row gives a meter another class than it had, or the first."""
        if ordinal not in self.said:
            return False
        key, text = self.said[ordinal]
        return self.held[key] != text

    def keep(self, connection: Connection, refused: Collection[Finding]) -> dict[int, str | None]:
        """Note the classes of the rows that were not refused; return the former, where it changed."""
        lost = {finding.ordinal for finding in refused}
        new = {
            key: text
            for ordinal, (key, text) in self.said.items()
            if ordinal not in lost and self.held[key] != text
        }
        energy.set_classes(connection, new)
        return {key: self.held[key] for key in new}
