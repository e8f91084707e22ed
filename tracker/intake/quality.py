"""What the codes beside readings mean: our four words, a utility's own table, or a published one."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Literal

from tracker.store.blocks import Quality

if TYPE_CHECKING:
    from tracker.intake.guide import ColumnGuide

#: A reading that the utility itself says is not there.
MISSING: Literal["missing"] = "missing"

Meaning = int | Literal["missing"]

#: The words of a `quality` column.
WORDS: dict[str, Meaning] = {
    "measured": int(Quality.HELD),
    "estimated": int(Quality.HELD | Quality.ESTIMATED),
    "doubtful": int(Quality.HELD | Quality.DOUBTFUL),
    "missing": MISSING,
}

#: Flags of a reading in IEEE 2030.5-2018 (quality flags; seen). Bit 0, valid, and bit 5, derived,
#: change nothing: a sum of measured readings is measured.
FLAGS_2030_5 = {
    "valid": 1 << 0,
    "manually edited": 1 << 1,
    "estimated from a reference day": 1 << 2,
    "linear interpolation": 1 << 3,
    "questionable": 1 << 4,
    "derived": 1 << 5,
    "projected": 1 << 6,
}
_ESTIMATED_2030_5 = sum(
    FLAGS_2030_5[name]
    for name in (
        "manually edited",
        "estimated from a reference day",
        "linear interpolation",
        "projected",
    )
)
_KNOWN_2030_5 = sum(FLAGS_2030_5.values())

#: Codes of a reading's quality in the ESPI schema of NAESB REQ.21 (from memory), in our words.
ESPI_WORDS = {
    0: "measured",  # valid
    7: "estimated",  # manually edited
    8: "estimated",  # from a reference day
    9: "estimated",  # linear interpolation
    10: "doubtful",  # questionable
    11: "measured",  # derived
    12: "estimated",  # projected
    13: "estimated",  # mixed
    14: "measured",  # raw
    15: "estimated",  # normalised for weather
    16: "doubtful",  # other
    17: "measured",  # validated
    18: "measured",  # verified
    19: "measured",  # revenue quality
}

#: Schemes that a column guide may name, and how a code of each is written.
SCHEMES: dict[str, tuple[re.Pattern[str], int]] = {
    "ieee 2030.5": (re.compile(r"\d{1,5}"), 10),
    "ieee 2030.5 hex": (re.compile(r"[0-9a-fA-F]{1,4}"), 16),
}
_PREFIXED_HEX = re.compile(r"0[xX][0-9a-fA-F]{1,4}")
#: Codes kept in a column of numbers with gaps come out of it with a decimal point.
_WHOLE = re.compile(r"(\d+)\.0+")


@dataclass(frozen=True, slots=True)
class QualityCodes:
    """The meaning of quality codes in a file.

    Examples
    --------
    >>> codes = QualityCodes({"E7": "estimated", "X": "missing"})
    >>> codes.meaning("e7") == Quality.HELD | Quality.ESTIMATED
    True
    >>> codes.meaning("X"), codes.meaning("?")
    ('missing', None)
    """

    words: Mapping[str, str] = field(default_factory=dict)  #: the utility's code: one of ours
    scheme: str | None = None  #: one of `SCHEMES`
    _known: dict[str, Meaning] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        known = dict(WORDS)
        known.update((_folded(code), WORDS[word]) for code, word in self.words.items())
        object.__setattr__(self, "_known", known)

    @classmethod
    def of(cls, guide: ColumnGuide) -> QualityCodes:
        """Return the codes that a column guide gives, beside our own words."""
        words = {code: word for code, word in guide.quality.items() if code != "scheme"}
        return cls(words, guide.quality.get("scheme"))

    def meaning(self, code: str) -> Meaning | None:
        """Return the flags of a reading with this code, "missing", or None for an unknown code."""
        folded = _folded(code)
        known = self._known.get(folded)
        if known is not None:
            return known
        if whole := _WHOLE.fullmatch(folded):
            return self.meaning(whole[1])
        return _meaning_2030_5(folded, self.scheme) if self.scheme else None

    @property
    def allowed(self) -> str:
        """What is allowed, in words."""
        codes = ", ".join([*WORDS, *self.words])
        if self.scheme:
            how = "in hexadecimal" if self.scheme.endswith("hex") else "as 17 or 0x11"
            return f"{codes}, or quality flags of IEEE 2030.5 {how}"
        return codes


def _folded(code: str) -> str:
    return code.strip().casefold()


def _meaning_2030_5(code: str, scheme: str) -> int | None:
    form, base = SCHEMES[scheme]
    if _PREFIXED_HEX.fullmatch(code):
        base = 16
    elif not form.fullmatch(code):
        return None
    bits = int(code, base)
    if bits & ~_KNOWN_2030_5:
        return None
    flags = Quality.HELD
    if bits & _ESTIMATED_2030_5:
        flags |= Quality.ESTIMATED
    if bits & FLAGS_2030_5["questionable"]:
        flags |= Quality.DOUBTFUL
    return int(flags)
