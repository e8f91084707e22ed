"""The unit page without a browser."""

from __future__ import annotations

import datetime as dt
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tracker.assessment.daily import aging_by_day, life_used_by_day
from tracker.assessment.trace import UnitTrace
from tracker.dashboard.app import create_app
from tracker.dashboard.figures import PANELS, Limits, limit_lines, thinned, unit_figure
from tracker.dashboard.pages import unit
from tracker.errors import InputError
from tracker.fleet.cautions import CAUTIONS
from tracker.store.blocks import Quality
from tracker.store.engine import Database

from .conftest import GAPPY, HOTTEST, N_UNIT, NO_DATA, NOWHERE


def test_the_figure_ends_where_the_ranking_says(fleet: Database) -> None:
    """Peak, hours and life drawn are those of the ranking, computed by the other engine.

    The fleet kernel runs on float32 loads and its own exponentials, the trace on the readable form;
    0.01 °C and 0.1 % are the project's own promise for the two.
    """
    row = unit.unit_page(fleet, HOTTEST).row
    assert row is not None
    trace, limits = unit.trace_for(fleet, HOTTEST)
    peak = int(np.nanargmax(np.where(trace.counted, trace.hot_spot_c, np.nan)))
    assert trace.hot_spot_c[peak] == pytest.approx(row["peak_hot_spot_c"], abs=0.01)
    assert row["peak_hot_spot_at"].timestamp() == trace.interval_start_s[peak]
    _, life_used_pct = life_used_by_day(
        trace.interval_start_s, trace.step_h, trace.aging_factor, trace.counted, limits.life_h
    )
    assert life_used_pct[-1] == pytest.approx(row["life_used_pct"], rel=1e-3)
    _, f_eqa = aging_by_day(trace.interval_start_s, trace.aging_factor, trace.counted)
    assert np.isnan(f_eqa[0])  # the first day is warm-up and counts nowhere
    assert np.nanmean(f_eqa) == pytest.approx(row["aging_factor"], rel=1e-3)


def test_place_by_hot_spot(fleet: Database) -> None:
    """The hottest is the first of all; a unit without figures has no place."""
    page = unit.unit_page(fleet, HOTTEST)
    assert (page.hotter, page.assessed) == (0, N_UNIT)


def test_given_derived_and_assumed_are_told_apart(fleet: Database) -> None:
    """An engineer must see which figures stand on the nameplate and which we filled in."""
    rows = {row.heading: row for row in unit.plate_rows(unit.unit_page(fleet, HOTTEST).record)}
    assert (rows["Rating"].value, rows["Rating"].origin) == ("37.5 kVA", "given")
    assert (rows["Average winding rise"].value, rows["Average winding rise"].origin) == (
        "55 °C",
        "given",
    )
    assert (rows["Loss ratio R"].value, rows["Loss ratio R"].origin) == ("4.556", "derived")
    assert (rows["Oil exponent n"].value, rows["Oil exponent n"].origin) == ("0.8", "assumed")
    assert (rows["Impedance"].value, rows["Impedance"].origin) == ("–", "not given")
    assert rows["Year made"].value == "1974"


def test_spans_hold_the_hottest_moment(fleet: Database) -> None:
    """The quick ranges are whole days around the peak, inside the period."""
    trace, _ = unit.trace_for(fleet, HOTTEST)
    row = unit.unit_page(fleet, HOTTEST).row
    assert row is not None
    for name, days in (("day", 1), ("week", 7), ("month", 30)):
        start, end = unit.span_of(trace, name)
        assert start <= row["peak_hot_spot_at"] < end
        assert end - start == dt.timedelta(days=days)
    start, end = unit.span_of(trace, "all")
    assert (end - start).total_seconds() == 3600 * len(trace.interval_start_s)


def test_gaps_stay_gaps_in_the_figure(fleet: Database) -> None:
    """A line across missing readings would show what nobody measured."""
    trace, limits = unit.trace_for(fleet, GAPPY)
    figure = unit_figure(trace, limits, unit.span_of(trace, "all"))
    by_name = {each.name: each for each in figure.data}
    for name in ("Load", "Hot spot", "Top oil"):
        assert np.isnan(np.asarray(by_name[name].y)[400])
        assert by_name[name].connectgaps is False
    assert "h without load" in unit.missing_words(trace)


# --- How the load came about ----------------------------------------------------------------------


def of_origins(fleet: Database, **hours_of_flag: int) -> UnitTrace:
    """Return the hottest unit's trace as if hours of it, one kind after the other, were not measured."""
    trace, _ = unit.trace_for(fleet, HOTTEST)
    flags, share = trace.load_flags.copy(), np.ones(len(trace.load_kva))
    start = 100
    for name, n_hour in hours_of_flag.items():
        flags[start : start + n_hour] |= np.uint8(Quality[name])
        if name != "DOUBTFUL":
            share[start : start + n_hour] = 0.5
        start += 50
    return replace(trace, load_flags=flags, measured_share=share)


def test_a_measured_load_is_said_to_be(fleet: Database) -> None:
    """Nothing is marked where nothing was filled, and the figure is as it was."""
    trace, limits = unit.trace_for(fleet, HOTTEST)
    assert unit.origin_words(trace) == "All of the load was measured."
    figure = unit_figure(trace, limits, unit.span_of(trace, "all"))
    assert len(figure.data) == 6
    assert figure.layout.yaxis.domain == PANELS[0].domain


def test_the_page_says_how_the_load_came_about(fleet: Database) -> None:
    """Shares and hours by hand, in words; a spread hour is no estimate of the utility's."""
    trace = of_origins(fleet, FILLED=2, LIKE_DAYS=30, SCALED=10, DOUBTFUL=5)
    unmeasured = 0.5 * np.nansum(trace.load_kva[trace.measured_share < 1])
    share_pct = 100 * (1 - unmeasured / np.nansum(trace.load_kva))
    assert unit.origin_words(trace) == (
        f"Of the load's energy {share_pct:.1f} % was measured. Some of the load is filled by a "
        "straight line in 2 h, filled by like days in 30 h, scaled up for missing meters in 10 h "
        "and doubtful but kept in 5 h."
    )
    spread = of_origins(fleet, SPREAD=40)
    spread.load_flags[100:140] |= np.uint8(Quality.ESTIMATED)
    assert "spread from monthly energy in 40 h." in unit.origin_words(spread)
    assert "estimated" not in unit.origin_words(spread)
    assert "estimated by the utility in 7 h" in unit.origin_words(of_origins(fleet, ESTIMATED=7))


def test_bridged_air_is_said(fleet: Database) -> None:
    """What heats the unit from outside was not all read either."""
    trace, _ = unit.trace_for(fleet, HOTTEST)
    bridged = np.zeros(len(trace.air_temp_c), dtype=np.bool_)
    bridged[50:53] = True
    words = unit.origin_words(replace(trace, air_filled=bridged))
    assert words.endswith("The air temperature is bridged by a straight line in 3 h.")


def test_each_origin_has_a_lane_of_its_own(fleet: Database) -> None:
    """The lane's place and its words tell what it is: all of them are of one colour."""
    trace = of_origins(fleet, FILLED=2, DOUBTFUL=5)
    _, limits = unit.trace_for(fleet, HOTTEST)
    figure = unit_figure(trace, limits, unit.span_of(trace, "all"))
    lanes = [each for each in figure.data if each.yaxis == "y5"]
    assert [lane.name for lane in lanes] == ["filled by a straight line", "doubtful but kept"]
    assert len({lane.line.color for lane in lanes}) == 1
    assert len({np.nanmin(lane.y) for lane in lanes}) == 2
    for lane, first, n_hour in zip(lanes, (100, 150), (2, 5), strict=True):
        start_s = trace.interval_start_s[first]
        seconds = np.asarray(lane.x).astype("datetime64[s]").astype(int)
        assert seconds[:2].tolist() == [start_s, start_s + 3600 * n_hour]
    words = [note.text for note in figure.layout.annotations if note.yref == "y5"]
    assert words == ["filled by a straight line, 2 h", "doubtful but kept, 5 h"]
    assert figure.layout.yaxis.domain[0] > figure.layout.yaxis5.domain[1]


@pytest.mark.parametrize("unit_id", [NO_DATA, NOWHERE])
def test_a_unit_without_load_has_words_and_no_figure(fleet: Database, unit_id: str) -> None:
    """Nothing is drawn, and the page says what is missing."""
    page = unit.unit_page(fleet, unit_id)
    assert page.row is not None
    assert page.row["peak_hot_spot_c"] is None
    trace, _ = unit.trace_for(fleet, unit_id)
    assert unit.missing_words(trace).startswith("No load is held")


def test_limits_far_above_are_said_and_not_drawn(fleet: Database) -> None:
    """The scale belongs to the unit; limits it never nears are in the note."""
    trace, limits = unit.trace_for(fleet, HOTTEST)
    near, far = limit_lines(trace, limits)
    assert {line.value for line in near} == {95.0, 140.0, 120.0, 200.0}
    assert far == []
    cool, cool_limits = unit.trace_for(fleet, GAPPY)
    near, far = limit_lines(cool, Limits(cool_limits.rated_kva, 110.0, 140.0, 180_000.0))
    assert {line.value for line in near} >= {110.0, 140.0}
    assert 200.0 in {line.value for line in far}


@given(
    st.lists(st.floats(-50, 250) | st.just(float("nan")), min_size=1, max_size=400),
    st.integers(2, 40),
)
def test_thinning_keeps_peaks_and_gaps(values: list[float], most: int) -> None:
    """However many points there are, the hottest one is drawn and a gap breaks the line."""
    series = np.array(values)
    index = thinned(series, most)
    drawn = series[index]
    assert (np.diff(index) > 0).all()
    assert len(index) <= max(1.5 * most + 3, 3)
    if np.isfinite(series).any():
        assert np.nanmax(drawn) == np.nanmax(series)
        assert np.nanmin(drawn) == np.nanmin(series)
    assert np.isnan(drawn).any() == np.isnan(series).any()


def test_an_unknown_unit_is_an_input_error(fleet: Database) -> None:
    """A mistyped id is told, never a traceback."""
    with pytest.raises(InputError, match="LK-99-9999"):
        unit.unit_page(fleet, "LK-99-9999")


@pytest.mark.parametrize(
    "path", ["/", "/unit", "/unit?unit_id=%00%FF&span=century", "/nowhere", "/?sort=%27;--&a=b&a=c"]
)
def test_any_address_is_answered(fleet: Database, path: str) -> None:
    """Odd paths and queries get a page, and its headers."""
    reply = create_app(fleet).server.test_client().get(path)
    assert reply.status_code == 200
    assert '<html lang="en">' in reply.text


def test_cautions_stand_on_both_layouts() -> None:
    """Nobody reads a temperature here without reading what it does not permit."""
    from tracker.dashboard.pages import ranking

    for page in (ranking, unit):
        text = str(page.layout())
        assert all(caution.matter in text for caution in CAUTIONS)
