"""Check values from outside the project, written as their sources print them.

Each says how it is held: *seen* on the page named, *from memory* of the document named, *computed*
by two independent methods from the formula named, or *common practice* of the trade. Columns are
parted by two spaces or more, so that a figure may have its thousands parted by one.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import Literal

Held = Literal["seen", "from memory", "computed", "common practice"]


@dataclass(frozen=True, slots=True)
class PrintedValues:
    """A table as text: what the values are for comes first on each line."""

    source: str
    held: Held
    text: str

    def rows(self) -> list[list[str]]:
        """Return the cells line by line, as printed."""
        return [re.split(r"\s{2,}", line.strip()) for line in self.text.strip().splitlines()]


# --- Aging ----------------------------------------------------------------------------------------

# hot spot, F_AA
AGING_FACTOR_110 = PrintedValues(
    "IEEE C57.91 clause 5, aging acceleration factor, reference 110 °C",
    "from memory",
    """
     60    0.0028
     70    0.0104
     80    0.0358
     90    0.1156
    100    0.3499
    110    1.0000
    120    2.7089
    130    6.9842
    140   17.1994
    150   40.5890
    160   92.0617
    170  201.2294
    180  424.9200
    """,
)

# hot spot, F_AA
AGING_FACTOR_95 = PrintedValues(
    "IEEE C57.91 clause 5, aging acceleration factor, reference 95 °C",
    "computed",
    """
     80   0.1769
     95   1
    100   1.7270
    110   4.9351
    120  13.3689
    140  84.8816
    """,
)

# constant, its value
LIFE_CONSTANTS = PrintedValues(
    "IEEE C57.91 per-unit life A exp(B/(θ + 273)), quoted at jp.b83c.eu.org/item?id=20167179",
    "seen",
    """
    B, K               15000
    A, 65 °C rise    9.8e-18
    """,
)

# winding rise, A, percent that the life at the reference hot spot misses 1 by
LIFE_AT_REFERENCE = PrintedValues(
    "IEEE C57.91 per-unit life, A as printed, against 1 at the reference hot spot",
    "computed",
    """
    65   9.80e-18  0.03
    55   2.00e-18  0.75
    """,
)

# winding rise, ambient, hot-spot allowance, reference hot spot
REFERENCE_65 = PrintedValues(
    "30 ambient + 65 rise + 15 allowance, weschler.com/?p=91020", "seen", "65  30  15  110"
)
REFERENCE_55 = PrintedValues(
    "allowance 10 °C for 55 °C rise, US Bureau of Reclamation FIST 1-5, quoted",
    "seen",
    "55  30  10  95",
)

# criterion, hours
NORMAL_LIFE = PrintedValues(
    "IEEE C57.91 table of life criteria",
    "from memory",
    """
    50 % of the tensile strength retained                   65 000
    25 % of the tensile strength retained                  135 000
    degree of polymerisation 200                           150 000
    functional-life tests of distribution transformers     180 000
    """,
)
NORMAL_LIFE_SEEN = PrintedValues(
    "life at 110 °C, nlfnorm.cz/terminologicky-slovnik/158005",
    "seen",
    "50 % of the tensile strength retained  65 000",
)

# hours, percent of life
LIFE_OF_A_DAY = PrintedValues(
    "24 h at F_EQA 1 over the life criteria of IEEE C57.91",
    "computed",
    """
     65 000  0.0369
    135 000  0.0178
    150 000  0.0160
    180 000  0.0133
    """,
)

# --- What a unit is -------------------------------------------------------------------------------

# cooling class, n, m
EXPONENTS = PrintedValues(
    "IEEE C57.91 clause 7, exponents",
    "from memory",
    """
    ONAN  0.8  0.8
    ONAF  0.9  0.8
    OFAF  0.9  0.8
    ODAF  1.0  1.0
    """,
)

# winding rise, hot-spot rise over ambient
HOT_SPOT_RISE = PrintedValues(
    "IEEE C57.91 clause 7, hot-spot rise over ambient at rated load",
    "from memory",
    """
    65  80
    55  65
    """,
)

# rating, winding rise, top-oil rise, gradient, R, time constant
CHARACTERISTICS = PrintedValues(
    "characteristics of ONAN units in the guides and in studies; defaults, not truth",
    "from memory",
    """
    100  65  55  25  3.2  3.0
    100  55  45  20  3.2  3.0
     25  65  53  27  4.9  6.9
    """,
)

# minutes
WINDING_TIME_CONSTANT = PrintedValues(
    "IEEE C57.91 clause 7, winding time constant, about", "from memory", "5"
)

# hot spot
BUBBLE_LIMIT = PrintedValues("IEEE C57.91, gas-bubble caution", "from memory", "140")

# part, Wh/(K·lb) or Wh/(K·gal), Wh/(K·kg) or Wh/(K·L)
THERMAL_CAPACITY = PrintedValues(
    "0.06 and 0.04 Wh/K a lb, 1.33 Wh/K a US gal (IEEE C57.91 clause 7), in kg and L",
    "computed",
    """
    core and coils, 1 kg  0.1323
    tank, 1 kg            0.0882
    oil, 1 L              0.351
    """,
)

# --- Temperatures of one unit: R 5, 53 K, 27 K, n = m = 0.8, 6 h, 5 min, in air of 30 °C ----------

# K, top oil, hot spot, F_AA
STEADY_STATE = PrintedValues(
    "IEEE C57.91 clause 7, steady state of R 5, 53 K, 27 K, n = m = 0.8 at 30 °C",
    "computed",
    """
    0.5    54.18   63.09  0.004226
    0.75   66.87   83.91  0.05713
    1.0    83.00  110.00  1.0000
    1.25  102.08  140.67  18.24
    1.5   123.81  175.47  304.1
    2.0   174.39  256.24  50 100
    """,
)

# h, top oil, hot spot
STEP_CORRECTED = PrintedValues(
    "IEEE C57.91 clause 7, step 0.5 to 1.5 at once, time constant corrected",
    "computed",
    """
     1   67.45  119.11
     4   93.92  145.58
     8  110.98  162.64
    24  123.38  175.03
    """,
)
STEP_RATED = PrintedValues(
    "IEEE C57.91 clause 7, step 0.5 to 1.5, time constant as rated",
    "computed",
    """
    1   64.87  116.53
    8  105.46  157.11
    """,
)

# K before, K after, h
CORRECTED_TIME_CONSTANT = PrintedValues(
    "IEEE C57.91 clause 7, oil time constant for any load, 6 h at rated load",
    "computed",
    """
    0    1    5.4828
    0.5  1    5.2198
    1    2    4.1383
    0.5  1.5  4.7296
    1.5  0.5  4.7296
    1    1    4.8
    """,
)

# --- Ratings --------------------------------------------------------------------------------------

PREFERRED_RATINGS = PrintedValues(
    "preferred ratings, attributed to IEEE C57.12.00",
    "seen",
    """
    1  5  10  15  25  37.5  50  75  100  167  250  333  500
    3  15  30  45  75  112.5  150  225  300  500  750  1000  1500  2000  2500
    """,
)
