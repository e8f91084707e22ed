"""The figures of the unit page: load, temperatures, aging by the day, life used."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass

import numpy as np
import plotly.graph_objects as go
from numpy.typing import NDArray

from tracker.assessment.daily import DAY_S, aging_by_day, life_used_by_day
from tracker.assessment.trace import UnitTrace
from tracker.dashboard.words import HIGHEST_HOT_SPOT_C, LOAD_ORIGINS, TOP_OIL_LIMIT_C
from tracker.store.blocks import Quality

#: Points a line is drawn with at most, a year of quarter hours and some; of more, the lowest and the
#: highest of each stretch are kept.
MOST_POINTS = 40_000

INK, FAINT, GRID_LINE = "#1d2733", "#5b6773", "#e4e8eb"
LOAD, AIR, TOP_OIL, HOT_SPOT, AGING = "#2b5c8a", "#3f7cab", "#ad6b0c", "#9f2a63", "#65156e"

#: How near a temperature comes to a limit before the limit is drawn, so that the scale stays [K].
DRAWN_WITHIN_K = 25.0


def _coloured(words: str, colour: str) -> str:
    return f"<span style='color:{colour}'>{words}</span>"


_TEMPERATURES = (("hot spot", HOT_SPOT), ("top oil", TOP_OIL), ("air", AIR))


@dataclass(frozen=True, slots=True)
class Panel:
    """A part of the figure: its heading, and the share of the height it takes."""

    words: str
    domain: tuple[float, float]


PANELS = (
    Panel("Load, kVA", (0.78, 1.0)),
    Panel(
        f"Temperature, °C: {', '.join(_coloured(*each) for each in _TEMPERATURES)}", (0.385, 0.725)
    ),
    Panel("Aging factor by day (F_EQA)", (0.18, 0.33)),
    Panel("Life used, %", (0.0, 0.125)),
)
FIGURE_HEIGHT = 980

#: Share of the height that a lane takes below the load, and what stands between load and lanes.
LANE_HEIGHT, LANE_GAP = 0.0165, 0.012


@dataclass(frozen=True, slots=True)
class Limits:
    """What the lines of a unit are held against."""

    rated_kva: float
    reference_hot_spot_c: float  #: hot spot of normal aging
    hot_spot_limit_c: float  #: limit in force
    life_h: float


@dataclass(frozen=True, slots=True)
class Line:
    """A figure worth a line across its panel, in the panel's unit."""

    value: float
    words: str
    colour: str
    dash: str


def thinned(values: NDArray[np.float64], most: int = MOST_POINTS) -> NDArray[np.intp]:
    """Return which points to draw: all of them, or each stretch's lowest, highest and first gap.

    Peaks survive whatever the number of points, and a gap still breaks the line.

    Parameters
    ----------
    values : float64, shape (n_time,)
        NaN marks a gap.
    most : int
        Number of points up to which all are drawn.

    Returns
    -------
    index : shape (n_drawn,)
        In order; at most 1.5 times `most` entries.

    Examples
    --------
    >>> thinned(np.array([1.0, 5.0, 2.0, 3.0, np.nan, 0.0]), most=4)
    array([0, 1, 3, 4, 5])
    """
    n_time = len(values)
    if n_time <= most:
        return np.arange(n_time)
    stretch = -(-n_time // (most // 2))
    padded = np.full(-(-n_time // stretch) * stretch, np.nan)
    padded[:n_time] = values
    rows = padded.reshape(-1, stretch)
    gap = np.isnan(rows)
    start = np.arange(len(rows)) * stretch
    lowest = start + np.where(gap, np.inf, rows).argmin(axis=1)
    highest = start + np.where(gap, -np.inf, rows).argmax(axis=1)
    first_gap = (start + gap.argmax(axis=1))[gap.any(axis=1)]
    index: NDArray[np.intp] = np.unique(np.concatenate([lowest, highest, first_gap]))
    return index[index < n_time]


def limit_lines(trace: UnitTrace, limits: Limits) -> tuple[list[Line], list[Line]]:
    """Return the temperature limits to draw, and those too far above to be worth the room."""
    hottest_c, oil_c = _highest(trace.hot_spot_c), _highest(trace.top_oil_c)
    always = [
        Line(limits.reference_hot_spot_c, "hot spot of normal aging", FAINT, "dot"),
        Line(limits.hot_spot_limit_c, "hot-spot limit in force", HOT_SPOT, "dash"),
    ]
    oil = Line(TOP_OIL_LIMIT_C, "top-oil limit", TOP_OIL, "dash")
    last = Line(HIGHEST_HOT_SPOT_C, "highest hot spot, any time", INK, "solid")
    sometimes = [(oil, oil_c)] + (
        [(last, hottest_c)] if limits.hot_spot_limit_c < HIGHEST_HOT_SPOT_C else []
    )
    near = [line for line, peak_c in sometimes if peak_c > line.value - DRAWN_WITHIN_K]
    far = [line for line, _ in sometimes if line not in near]
    return always + near, far


def unit_figure(
    trace: UnitTrace, limits: Limits, span: tuple[dt.datetime, dt.datetime]
) -> go.Figure:
    """Draw a unit's trace in four panels over one time axis, opened at `span`.

    Load and air are means of their interval; oil and hot spot stand at its end. All are stamped with
    the interval's start, as everywhere else.
    """
    lines = [
        (1, Line(limits.rated_kva, "rating", INK, "dash"), "kVA"),
        *((2, line, "°C") for line in limit_lines(trace, limits)[0]),
        (3, Line(1.0, "normal aging", INK, "dot"), ""),
    ]
    lanes = lanes_of(trace)
    figure = go.Figure([*_interval_lines(trace), *_days(trace, limits), *_lane_marks(trace, lanes)])
    figure.update_layout(
        template="plotly_white",
        height=FIGURE_HEIGHT,
        margin={"l": 52, "r": 12, "t": 34, "b": 36},
        font={"family": "system-ui, 'Segoe UI', Roboto, 'Noto Sans', sans-serif", "color": INK},
        hovermode="x unified",
        hoversubplots="axis",
        hoverlabel={"bgcolor": "rgba(255,255,255,0.94)", "font": {"size": 12}},
        dragmode="zoom",
        showlegend=False,
        bargap=0,
        xaxis=_time_axis(span),
        shapes=[*_warm_ups(trace), *(_line_shape(row, line) for row, line, _ in lines)],
        annotations=[
            *(_line_words(*each) for each in lines),
            *(_panel_words(panel) for panel in PANELS),
            *(_lane_words(trace, number, flag) for number, flag in enumerate(lanes)),
        ],
    )
    figure.update_layout({f"yaxis{_axis(row)}": _value_axis(row) for row in (1, 2, 3, 4)})
    if lanes:
        bottom, top = PANELS[0].domain
        lanes_top = bottom + LANE_HEIGHT * len(lanes)
        figure.update_layout(
            yaxis={"domain": (lanes_top + LANE_GAP, top)},
            yaxis5={
                "domain": (bottom, lanes_top),
                "range": [len(lanes) - 0.5, -0.5],
                "visible": False,
                "fixedrange": True,
            },
        )
    return figure


def lanes_of(trace: UnitTrace) -> list[Quality]:
    """Return how parts of the load came about: those of `LOAD_ORIGINS` that occur, a lane each."""
    return [flag for flag in LOAD_ORIGINS if _came_so(trace, flag).any()]


def hours_of(trace: UnitTrace, flag: Quality) -> float:
    """Return in how many hours some of the load came about in a way [h]."""
    return float(np.count_nonzero(_came_so(trace, flag)) * trace.step_h)


def _came_so(trace: UnitTrace, flag: Quality) -> NDArray[np.bool_]:
    """Say where the load came about in a way; what we spread is no estimate of the utility's."""
    came: NDArray[np.bool_] = (trace.load_flags & flag) != 0
    if flag == Quality.ESTIMATED:
        came &= (trace.load_flags & Quality.SPREAD) == 0
    return came


def _lane_marks(trace: UnitTrace, lanes: list[Quality]) -> list[go.Scatter]:
    """Mark where the load came about otherwise, a lane a way: its place tells which, not a colour.

    A stretch too short to be seen at the figure's width still has a stroke at its beginning.
    """
    step_s = round(3600 * trace.step_h)
    marks = []
    for number, flag in enumerate(lanes):
        line = number + 0.4  # below the lane's words, as long as they may be on a narrow screen
        first, after = _stretches(_came_so(trace, flag))
        ends = trace.interval_start_s[after - 1] + step_s
        # From its beginning to its end, and a gap to the next.
        moments = np.stack([trace.interval_start_s[first], ends, ends], axis=1)
        marks.append(
            go.Scatter(
                x=_moments(moments.ravel()),
                y=np.tile(np.array([line, line, np.nan], dtype=np.float32), len(first)),
                yaxis="y5",
                name=LOAD_ORIGINS[flag],
                mode="lines+markers",
                line={"color": FAINT, "width": 3},
                marker={
                    "symbol": np.tile(["line-ns", "circle", "circle"], len(first)),
                    "size": np.tile([6, 0, 0], len(first)),
                    "line": {"color": FAINT, "width": 1},
                },
                hoverinfo="skip",
            )
        )
    return marks


def _lane_words(trace: UnitTrace, number: int, flag: Quality) -> dict[str, object]:
    return {
        "text": f"{LOAD_ORIGINS[flag]}, {hours_of(trace, flag):,.4g} h",
        "xref": "x domain",
        "yref": "y5",
        "x": 0.004,
        "y": number,
        "xanchor": "left",
        "yanchor": "middle",
        "showarrow": False,
        "yshift": 1,
        "font": {"size": 10, "color": INK},
    }


def _stretches(on: NDArray[np.bool_]) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Return where each run begins, and the place after its end."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], on, [False]]).astype(np.int8)))
    return edges[::2], edges[1::2]


def _time_axis(span: tuple[dt.datetime, dt.datetime]) -> dict[str, object]:
    """Return the one time axis: panels that share it zoom and are read together."""
    return {
        "type": "date",
        "anchor": "y4",
        "range": [f"{each:%Y-%m-%d %H:%M}" for each in span],
        "gridcolor": GRID_LINE,
        "hoverformat": "%a %d %b %Y %H:%M UTC",
        "tickformatstops": [
            {"dtickrange": [None, 86_400_000 - 1], "value": "%H:%M\n%d %b %Y"},
            {"dtickrange": [86_400_000, None], "value": "%d %b\n%Y"},
        ],
        "ticks": "outside",
        "tickcolor": GRID_LINE,
    }


def _value_axis(row: int) -> dict[str, object]:
    return {
        "domain": PANELS[row - 1].domain,
        "gridcolor": GRID_LINE,
        "zeroline": False,
        "fixedrange": True,
        "nticks": 6,
        "rangemode": "normal" if row == 2 else "tozero",  # air may be below 0 °C
    }


def _interval_lines(trace: UnitTrace) -> list[go.Scatter]:
    series = (
        ("Load", trace.load_kva, "y", LOAD, 1.2, "%{y:,.1f} kVA", "hv"),
        ("Hot spot", trace.hot_spot_c, "y2", HOT_SPOT, 1.5, "%{y:.1f} °C", "linear"),
        ("Top oil", trace.top_oil_c, "y2", TOP_OIL, 1.3, "%{y:.1f} °C", "linear"),
        ("Air", trace.air_temp_c, "y2", AIR, 1.1, "%{y:.1f} °C", "linear"),
    )
    return [
        go.Scatter(
            **_points(trace, values),
            yaxis=axis,
            name=name,
            mode="lines",
            line={"color": colour, "width": width, "shape": shape},
            connectgaps=False,
            hovertemplate=hover,
        )
        for name, values, axis, colour, width, hover, shape in series
    ]


def _points(trace: UnitTrace, values: NDArray[np.float64]) -> dict[str, object]:
    """Return a line's points; times are text, as a browser takes numbers for its own local time."""
    drawn = thinned(values)
    y = values[drawn].astype(np.float32)
    if len(drawn) == len(values):
        first = _moments(trace.interval_start_s[:1])[0]
        return {"x0": str(first), "dx": 3_600_000 * trace.step_h, "y": y}
    return {"x": _moments(trace.interval_start_s[drawn]), "y": y}


def _days(trace: UnitTrace, limits: Limits) -> tuple[go.Bar, go.Scatter]:
    day_start_s, f_eqa = aging_by_day(trace.interval_start_s, trace.aging_factor, trace.counted)
    day_end_s, life_used_pct = life_used_by_day(
        trace.interval_start_s, trace.step_h, trace.aging_factor, trace.counted, limits.life_h
    )
    bars = go.Bar(
        x=_moments(day_start_s + DAY_S // 2),
        y=f_eqa.astype(np.float32),
        yaxis="y3",
        width=0.9 * 1000 * DAY_S,
        name="Aging factor of the day",
        marker={"color": AGING, "line": {"width": 0}},
        hovertemplate="%{y:.3g} × normal",
    )
    used = go.Scatter(
        x=_moments(day_end_s),
        y=life_used_pct.astype(np.float32),
        yaxis="y4",
        name="Life used since the start",
        mode="lines",
        line={"color": AGING, "width": 1.8},
        hovertemplate="%{y:.3g} %",
    )
    return bars, used


def _warm_ups(trace: UnitTrace) -> list[dict[str, object]]:
    """Shade what is known and counts in no figure."""
    uncounted = ~trace.counted & np.isfinite(trace.hot_spot_c)
    step_s = round(3600 * trace.step_h)
    shapes: list[dict[str, object]] = []
    for first, last in zip(*_stretches(uncounted), strict=True):
        x0, x1 = _moments(trace.interval_start_s[[first, last - 1]] + np.array([0, step_s]))
        shapes += [
            {
                "type": "rect",
                "xref": "x",
                "yref": f"y{_axis(row)} domain",
                "x0": str(x0),
                "x1": str(x1),
                "y0": 0,
                "y1": 1,
                "fillcolor": "#8c97a1",
                "opacity": 0.18,
                "line": {"width": 0},
                "layer": "below",
            }
            for row in (1, 2)
        ]
    return shapes


def _line_shape(row: int, line: Line) -> dict[str, object]:
    return {
        "type": "line",
        "xref": "x domain",
        "yref": f"y{_axis(row)}",
        "x0": 0,
        "x1": 1,
        "y0": line.value,
        "y1": line.value,
        "line": {"color": line.colour, "width": 1.2, "dash": line.dash},
    }


def _line_words(row: int, line: Line, unit: str) -> dict[str, object]:
    return {
        "text": f"{line.words} {line.value:,g} {unit}".strip(),
        "xref": "x domain",
        "yref": f"y{_axis(row)}",
        "x": 0.004,
        "y": line.value,
        "xanchor": "left",
        "yanchor": "bottom",
        "showarrow": False,
        "font": {"size": 11, "color": INK},
        "bgcolor": "rgba(255,255,255,0.85)",
    }


def _panel_words(panel: Panel) -> dict[str, object]:
    return {
        "text": f"<b>{panel.words}</b>",
        "xref": "paper",
        "yref": "paper",
        "x": 0,
        "y": panel.domain[1],
        "xanchor": "left",
        "yanchor": "bottom",
        "yshift": 6,
        "showarrow": False,
        "font": {"size": 13},
    }


def _axis(row: int) -> str:
    return "" if row == 1 else str(row)


def _moments(seconds: NDArray[np.int64]) -> NDArray[np.datetime64]:
    return seconds.astype("datetime64[s]")


def _highest(values: NDArray[np.float64]) -> float:
    return float(np.max(values, initial=-np.inf, where=np.isfinite(values)))
