"""When it is dark: what lights that burn from dusk to dawn need to know."""

from __future__ import annotations

import datetime as dt
from functools import lru_cache

import numpy as np
from astral import Observer
from astral.sun import elevation, sunrise, sunset
from numpy.typing import NDArray

from tracker.store.blocks import month_start_s, values_a_month

#: Places nearer than this share their sun [degrees]; a tenth is 24 s of time at most.
GRID_DEGREES = 0.1


def dark_share(latitude: float, longitude: float, month: int, step_min: int) -> NDArray[np.float64]:
    """Return the share of each interval of a month that lies between sunset and sunrise.

    Parameters
    ----------
    latitude, longitude : float
        North and east. [degrees]
    month : int
        Counted from January 1970, in UTC.
    step_min : int
        Length of the intervals. [min]

    Returns
    -------
    ndarray of float64, shape (n_value,)
        0 by day, 1 by night.
    """
    return _dark_share(
        round(latitude / GRID_DEGREES), round(longitude / GRID_DEGREES), month, step_min
    )


@lru_cache(maxsize=4096)
def _dark_share(latitude: int, longitude: int, month: int, step_min: int) -> NDArray[np.float64]:
    observer = Observer(latitude * GRID_DEGREES, longitude * GRID_DEGREES)
    start_s, step_s = month_start_s(month), 60 * step_min
    # Edges of the intervals [s]; the dark hours up to each are interpolated, and their steps taken.
    edges = start_s + step_s * np.arange(values_a_month(month, step_min) + 1)
    turns, dark_until = _dark_before(observer, int(edges[0]), int(edges[-1]))
    return np.diff(np.interp(edges, turns, dark_until)) / step_s


def _dark_before(observer: Observer, first_s: int, last_s: int) -> tuple[list[float], list[float]]:
    """Return sunrises and sunsets about a period, and how long it had been dark up to each [s]."""
    day = dt.timedelta(days=1)
    begin = dt.datetime.fromtimestamp(first_s, dt.UTC) - 2 * day
    end = dt.datetime.fromtimestamp(last_s, dt.UTC) + 2 * day
    events: dict[float, bool] = {}  # moment: whether it is dark from then on
    date = begin.date()
    while date <= end.date():
        for find, dark in ((sunrise, False), (sunset, True)):
            try:
                events[find(observer, date, tzinfo=dt.UTC).timestamp()] = dark
            except ValueError:  # the sun stays up, or down, all that day
                continue
        date += day
    moments = sorted(at for at in events if begin.timestamp() < at < end.timestamp())
    is_dark = not events[moments[0]] if moments else elevation(observer, begin) < 0.0
    turns, until = [begin.timestamp()], [0.0]
    for moment in [*moments, end.timestamp()]:
        until.append(until[-1] + (moment - turns[-1] if is_dark else 0.0))
        turns.append(moment)
        is_dark = events.get(moment, is_dark)
    return turns, until
