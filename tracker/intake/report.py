"""What became of a file: four fates that add up, and every refusal with its place and reason."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import asdict, dataclass, field
from typing import Any

#: Refusals printed in a JSON answer; the ledger and `--refusals FILE.csv` hold all of them.
SHOWN_REFUSALS = 1_000

#: Raw text kept of a refused row [characters].
KEPT_TEXT = 500


@dataclass(frozen=True, slots=True)
class Finding:
    """A row that cannot be taken, before its place in the file is looked up."""

    ordinal: int  #: place among the data rows the parser gave, from 0
    column: str
    code: str
    reason: str


@dataclass(frozen=True, slots=True)
class Refusal:
    """A refused row with its place, as an editor shows it, and what stood there."""

    file: str
    line: int
    column: str
    code: str
    reason: str
    text: str


@dataclass(slots=True)
class Fates:
    """Counts of what became of the readings; refused ones are counted by their refusals."""

    taken: int = 0
    unchanged: int = 0
    corrected: int = 0

    def add(self, other: Fates) -> None:
        """Add the counts of another part of the same file."""
        self.taken += other.taken
        self.unchanged += other.unchanged
        self.corrected += other.corrected


@dataclass(frozen=True, slots=True)
class FileReport:
    """The fate of one file."""

    file: str
    kind: str
    fates: Fates
    refusals: Sequence[Refusal]
    left_out: Sequence[str] = ()  #: headings that were not used
    notes: Sequence[str] = field(default_factory=list)  #: what was found or assumed, for a person

    @property
    def readings(self) -> int:
        """All rows, or cells, of the file."""
        return self.fates.taken + self.fates.unchanged + self.fates.corrected + len(self.refusals)


def as_json(reports: Iterable[FileReport]) -> dict[str, Any]:
    """Sum reports up in the form that `--json` prints."""
    reports = list(reports)
    refusals = [refusal for report in reports for refusal in report.refusals]
    return {
        "files": len(reports),
        "readings": sum(report.readings for report in reports),
        "taken": sum(report.fates.taken for report in reports),
        "unchanged": sum(report.fates.unchanged for report in reports),
        "corrected": sum(report.fates.corrected for report in reports),
        "refused": len(refusals),
        "refusals": [asdict(refusal) for refusal in refusals[:SHOWN_REFUSALS]],
    }
