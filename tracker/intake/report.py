"""What became of a file: four fates that add up, and every refusal with its place and reason."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence, Set
from dataclasses import asdict, dataclass, field
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

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


class Findings:
    """What cannot be taken of a file, row by row; small, because it may be every row of it.

    Examples
    --------
    >>> findings = Findings()
    >>> findings.add([4, 2], "kwh", "value.unreadable", "no number")
    >>> [each.ordinal for each in findings.in_order()]
    [2, 4]
    """

    def __init__(self) -> None:
        self._kinds: dict[tuple[str, str, str], int] = {}
        self._ordinals: list[NDArray[np.int64]] = []
        self._kind_of: list[int] = []

    @classmethod
    def of(cls, findings: Iterable[Finding]) -> Findings:
        """Take findings that were made one by one."""
        taken = cls()
        for finding in findings:
            taken.add([finding.ordinal], finding.column, finding.code, finding.reason)
        return taken

    def add(self, ordinals: ArrayLike, column: str, code: str, reason: str) -> None:
        """Note rows that cannot be taken, all for one reason."""
        rows = np.asarray(ordinals, dtype=np.int64)
        if len(rows):
            self._ordinals.append(rows)
            kind = (column, code, reason)
            self._kind_of.append(self._kinds.setdefault(kind, len(self._kinds)))

    def __len__(self) -> int:
        return sum(map(len, self._ordinals))

    def in_order(self) -> Iterator[Finding]:
        """Yield the findings in the order of the rows, those of one row as they were noted."""
        if not self._ordinals:
            return
        ordinals = np.concatenate(self._ordinals)
        kind_of = np.repeat(
            np.array(self._kind_of, dtype=np.int32), [len(rows) for rows in self._ordinals]
        )
        kinds = list(self._kinds)
        for place in np.argsort(ordinals, kind="stable"):
            yield Finding(int(ordinals[place]), *kinds[kind_of[place]])


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
class Outcome:
    """What a file brought, before its refusals are looked up."""

    fates: Fates
    findings: Findings
    left_out: Sequence[str] = ()  #: headings that were not used
    notes: Sequence[str] = ()  #: what was found or assumed, for a person
    facts: Mapping[str, Any] = field(default_factory=dict)  #: the same for the ledger
    touched: Set[tuple[int, int]] = frozenset()
    """(series key, month) of readings that changed, whose sites' load is still to be derived."""


@dataclass(frozen=True, slots=True)
class FileReport:
    """The fate of one file."""

    file: str
    kind: str
    fates: Fates
    refused: int
    refusals: Sequence[Refusal]  #: the first of them; the ledger has all
    reasons: Mapping[str, int] = field(default_factory=dict)  #: refusals by code
    left_out: Sequence[str] = ()
    notes: Sequence[str] = ()

    @property
    def readings(self) -> int:
        """All rows, or cells, of the file."""
        return self.fates.taken + self.fates.unchanged + self.fates.corrected + self.refused


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
        "refused": sum(report.refused for report in reports),
        "refusals": [asdict(refusal) for refusal in refusals[:SHOWN_REFUSALS]],
    }
