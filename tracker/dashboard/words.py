"""How the pages speak: figures with sensible digits, moments with their zone, heat in plain words."""

from __future__ import annotations

import datetime as dt
import math
from bisect import bisect_right
from dataclasses import dataclass

from tracker.fleet.nameplate import REFERENCE_HOT_SPOT_C
from tracker.store.blocks import Quality

#: What stands where there is no figure.
NONE = "–"

#: Hottest spot no distribution transformer is to pass, whatever limit is in force [°C]; C57.91,
#: from memory.
HIGHEST_HOT_SPOT_C = 200.0

#: Top-oil limit of distribution transformers [°C]; C57.91, from memory.
TOP_OIL_LIMIT_C = 120.0

#: Steps of the colour scale for hot spots [°C]; the style sheet has one shade more than these.
HEAT_STEPS_C = (80.0, 95.0, 110.0, 125.0, 140.0, 170.0, 200.0)


#: How a load came about where it was not plainly measured; a site's hour may be several of these.
LOAD_ORIGINS = {
    Quality.ESTIMATED: "estimated by the utility",
    Quality.FILLED: "filled by a straight line",
    Quality.LIKE_DAYS: "filled by like days",
    Quality.SCALED: "scaled up for missing meters",
    Quality.SPREAD: "spread from monthly energy",
    Quality.DOUBTFUL: "doubtful but kept",
}


def decimals(value: float | None, digits: int) -> str:
    """Write a figure with so many digits after the point.

    >>> decimals(1234.56, 1), decimals(None, 1)
    ('1,234.6', '–')
    """
    if value is None or not math.isfinite(value):
        return NONE
    return f"{value:,.{digits}f}"


def significant(value: float | None, digits: int = 3) -> str:
    """Write a figure that may be very small or very large, with so many significant digits.

    >>> significant(0.0042261), significant(18.24), significant(50_100.0), significant(0.0)
    ('0.00423', '18.2', '50,100', '0')
    """
    if value is None or not math.isfinite(value):
        return NONE
    if value == 0.0:
        return "0"
    after_point = digits - 1 - math.floor(math.log10(abs(value)))
    rounded = round(value, after_point)
    return f"{rounded:,.{max(after_point, 0)}f}"


def plain(value: float | str) -> str:
    """Write a figure of a nameplate as it would stand there.

    >>> plain(25.0), plain(37.5), plain("ONAN"), plain(5 / 60), plain(7_200)
    ('25', '37.5', 'ONAN', '0.08333', '7,200')
    """
    if isinstance(value, str):
        return value
    return f"{value:,.0f}" if value == round(value) else f"{value:,.4g}"


def moment(at: dt.datetime | None) -> str:
    """Write a moment in UTC; headings say so.

    >>> moment(dt.datetime(2026, 7, 3, 17, tzinfo=dt.UTC))
    '2026-07-03 17:00'
    """
    return NONE if at is None else f"{at.astimezone(dt.UTC):%Y-%m-%d %H:%M}"


def counted(number: int, one: str, many: str) -> str:
    """Write a count with its noun.

    >>> counted(1, "unit", "units"), counted(2500, "unit", "units")
    ('1 unit', '2,500 units')
    """
    return f"{number:,} {one if number == 1 else many}"


@dataclass(frozen=True, slots=True)
class Heat:
    """How hot a unit got: a step of the colour scale, and words that stand beside the figure."""

    step: int
    words: str


def reference_hot_spot_c(winding_rise_c: float | None) -> float:
    """Return the hot spot of normal aging [°C]; a rise that is not given is taken as 65 °C."""
    return REFERENCE_HOT_SPOT_C[65.0 if winding_rise_c is None else winding_rise_c]


def heat_of(peak_hot_spot_c: float, reference_c: float, limit_c: float) -> Heat:
    """Put a peak hot spot in words.

    Parameters
    ----------
    peak_hot_spot_c : float
        [°C]
    reference_c : float
        Hot spot of normal aging. [°C]
    limit_c : float
        Limit in force. [°C]

    Examples
    --------
    >>> [heat_of(peak_c, 110.0, 140.0).words for peak_c in (110.0, 139.0, 141.0, 201.0)]
    ['within limits', 'warm: over 110 °C', 'over limit: 140 °C', 'far over: 200 °C']
    """
    step = bisect_right(HEAT_STEPS_C, peak_hot_spot_c)
    if peak_hot_spot_c > max(limit_c, HIGHEST_HOT_SPOT_C):
        return Heat(step, f"far over: {HIGHEST_HOT_SPOT_C:g} °C")
    if peak_hot_spot_c > limit_c:
        return Heat(step, f"over limit: {limit_c:g} °C")
    if peak_hot_spot_c > reference_c:
        return Heat(step, f"warm: over {reference_c:g} °C")
    return Heat(step, "within limits")
