"""Quality codes: our words, a utility's own, and published ones."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tracker.intake.guide import ColumnGuide, guide_from
from tracker.intake.quality import ESPI_WORDS, WORDS, QualityCodes
from tracker.store.blocks import Quality

MEASURED = int(Quality.HELD)
ESTIMATED = int(Quality.HELD | Quality.ESTIMATED)
DOUBTFUL = int(Quality.HELD | Quality.DOUBTFUL)


def test_our_words_need_no_guide() -> None:
    """The contract names three; doubtful is what validation finds."""
    codes = QualityCodes.of(ColumnGuide())
    assert [codes.meaning(word) for word in ("measured", "Estimated ", "DOUBTFUL", "missing")] == [
        MEASURED,
        ESTIMATED,
        DOUBTFUL,
        "missing",
    ]
    assert codes.meaning("A") is None
    assert codes.allowed == "measured, estimated, doubtful, missing"


def test_a_guide_gives_a_utility_its_codes() -> None:
    """Without regard to case; our own words stay known beside them."""
    codes = QualityCodes.of(
        guide_from('[quality]\nA = "measured"\n7 = "estimated"\n"n/a" = "missing"')
    )
    assert codes.meaning("a") == MEASURED
    assert codes.meaning("N/A") == "missing"
    assert codes.meaning("estimated") == ESTIMATED
    assert codes.meaning("B") is None
    assert codes.allowed.endswith("A, 7, n/a")


@pytest.mark.parametrize("code", ["7", " 7 ", "7.0", "7.00"])
def test_codes_that_went_through_a_column_of_numbers(code) -> None:
    """A frame with gaps makes 7.0 of a 7."""
    assert QualityCodes({"7": "estimated"}).meaning(code) == ESTIMATED
    assert QualityCodes({"7": "estimated"}).meaning("7.5") is None


# Bits of IEEE 2030.5-2018 (seen): 0 valid, 1 manually edited, 2 estimated from a reference day,
# 3 linear interpolation, 4 questionable, 5 derived, 6 projected.
@pytest.mark.parametrize(
    ("code", "meaning"),
    [
        ("0", MEASURED),
        ("1", MEASURED),
        ("2", ESTIMATED),
        ("4", ESTIMATED),
        ("8", ESTIMATED),
        ("16", DOUBTFUL),
        ("17", DOUBTFUL),
        ("32", MEASURED),
        ("33", MEASURED),
        ("64", ESTIMATED),
        ("20", ESTIMATED | DOUBTFUL),
        ("0x11", DOUBTFUL),
        ("0X09", ESTIMATED),
        ("128", None),
        ("0x80", None),
        ("-1", None),
        ("x", None),
        ("99999999999999999999", None),
        ("estimated", ESTIMATED),
    ],
)
def test_flags_of_ieee_2030_5(code, meaning) -> None:
    """Bits that say the meter did not measure it make an estimate, the questionable one a doubt."""
    codes = QualityCodes.of(guide_from('[quality]\nscheme = "ieee 2030.5"'))
    assert codes.meaning(code) == meaning
    assert "IEEE 2030.5" in codes.allowed


def test_flags_written_in_hexadecimal() -> None:
    """As the XML of the standard writes them."""
    codes = QualityCodes.of(guide_from('[quality]\nscheme = "ieee 2030.5 hex"'))
    assert codes.meaning("11") == DOUBTFUL
    assert codes.meaning("0009") == ESTIMATED
    assert codes.meaning("80") is None


@given(st.integers(0, 127))
def test_every_combination_of_flags_is_a_held_reading(bits) -> None:
    """However many bits stand together, the reading is there, and written either way it is the same."""
    codes = QualityCodes(scheme="ieee 2030.5")
    flags = codes.meaning(str(bits))
    assert isinstance(flags, int)
    assert flags & Quality.HELD
    assert bool(flags & Quality.DOUBTFUL) == bool(bits & 16)
    assert bool(flags & Quality.ESTIMATED) == bool(bits & (2 | 4 | 8 | 64))
    assert codes.meaning(f"{bits:#x}") == flags
    assert QualityCodes(scheme="ieee 2030.5 hex").meaning(f"{bits:02x}") == flags


def test_codes_of_espi_are_words_of_ours() -> None:
    """Codes of the published schema, from memory: 0 valid, 8 estimated, 10 questionable, 14 raw."""
    assert set(ESPI_WORDS.values()) <= set(WORDS)
    assert [ESPI_WORDS[code] for code in (0, 8, 10, 14)] == [
        "measured",
        "estimated",
        "doubtful",
        "measured",
    ]
