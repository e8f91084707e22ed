"""Why a unit is not ranked among the others."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from tracker.store.results import APART


def why_apart(row: Mapping[str, Any]) -> str | None:
    """Say why a unit stands apart in the ranking; None where it does not, or has no figures.

    Parameters
    ----------
    row : mapping
        A row of the ranking. The share is rounded down, so that it never reads as enough.

    Examples
    --------
    >>> why_apart({"standing": APART, "coverage_pct": 79.96})
    'only 79 % of its energy is measured'
    """
    if row["standing"] != APART:
        return None
    return f"only {math.floor(row['coverage_pct'])} % of its energy is measured"
