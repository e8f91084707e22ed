"""The dashboard in a real browser, against the real server and a store in a file."""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Iterator

import pytest
from playwright.sync_api import Browser, BrowserContext, Locator, Page, expect

from tracker.fleet.cautions import CAUTIONS
from tracker.planning.priority import priority_list
from tracker.reports.tables import csv_text
from tracker.store.engine import Database
from tracker.store.results import latest_assessment, ranking_page

from .conftest import FEEDERS, GAPPY, HOTTEST, N_UNIT, NO_DATA

pytestmark = pytest.mark.browser

#: Long enough for a machine that does other things too; nothing here is timed.
PATIENCE_MS = 30_000
expect.set_options(timeout=PATIENCE_MS)

HOME = ("http://127.0.0.1:", "data:", "blob:")


@pytest.fixture(scope="module")
def context_of_all(browser: Browser) -> Iterator[BrowserContext]:
    """One profile for all tests: scripts come from its cache as they do for people.

    Its clock is not at UTC, so that a time shown in the browser's own zone would be found.
    """
    context = browser.new_context(timezone_id="America/Chicago")
    yield context
    context.close()


@pytest.fixture
def quiet(context_of_all: BrowserContext) -> Iterator[Page]:
    """A page that must stay silent and at home: any console message or foreign request fails."""
    page = context_of_all.new_page()
    noise: list[str] = []
    page.set_default_timeout(PATIENCE_MS)
    page.on("console", lambda message: noise.append(f"{message.type}: {message.text}"))
    page.on("pageerror", lambda error: noise.append(f"error: {error}"))
    page.on("request", lambda asked: asked.url.startswith(HOME) or noise.append(asked.url))
    page.on("response", lambda got: got.status < 400 or noise.append(f"{got.status} {got.url}"))
    yield page
    page.close()
    assert noise == []


def cell(page: Page, row: int, column: str) -> Locator:
    """Return a cell of the ranking by its place on the screen."""
    return page.locator(f"#ranking-grid [row-index='{row}'] [col-id='{column}']")


def days_shown(page: Page) -> float:
    """Return how many days the figure's time axis spans."""
    axis = "document.querySelector('#unit-figure .js-plotly-plot')._fullLayout.xaxis"
    return float(
        page.evaluate(f"({axis}.r2l({axis}.range[1]) - {axis}.r2l({axis}.range[0])) / 864e5")
    )


def wait_for_days(page: Page, least: float, most: float) -> None:
    """Wait for such a span; the page's own policy forbids Playwright's way to wait."""
    for _ in range(400):
        if least <= days_shown(page) <= most:
            return
        page.wait_for_timeout(50)
    assert least <= days_shown(page) <= most


def test_the_hottest_unit_stands_first(quiet: Page, fleet_url: str) -> None:
    """The page answers the question it is opened for without a press."""
    quiet.goto(fleet_url)
    expect(cell(quiet, 0, "unit_id")).to_have_text(HOTTEST)
    expect(cell(quiet, 0, "peak_hot_spot_c")).to_contain_text("over limit: 140 °C")
    expect(quiet.locator("#ranking-count-all")).to_have_text(f"{N_UNIT:,}")
    expect(quiet.locator("#ranking-shown")).to_have_text(f"{N_UNIT} units shown")
    expect(quiet.locator("#ranking-strip")).to_contain_text("larkmoor.db")
    expect(quiet).to_have_title("Ranking - tracker")


def test_a_press_on_a_heading_sorts_the_whole_fleet(
    quiet: Page, fleet_url: str, fleet: Database
) -> None:
    """Sorting reaches units that were never loaded, and the address keeps it."""
    with fleet.reading() as connection:
        assessment = latest_assessment(connection)
        assert assessment is not None
        first = ranking_page(connection, assessment.key, stop=1, sort=[("unit_id", "desc")]).rows[0]
    quiet.goto(fleet_url)
    expect(cell(quiet, 0, "unit_id")).to_have_text(HOTTEST)
    heading = quiet.locator(".ag-header-cell[col-id='unit_id'] .ag-header-cell-text")
    heading.click()
    expect(quiet).to_have_url(f"{fleet_url}?sort=unit_id")
    heading.click()
    expect(cell(quiet, 0, "unit_id")).to_have_text(first["unit_id"])
    expect(quiet).to_have_url(f"{fleet_url}?sort=-unit_id")


def test_cards_search_and_feeder_filter_in_the_database(quiet: Page, fleet_url: str) -> None:
    """Each control narrows the fleet, says so, and can be taken back."""
    quiet.goto(fleet_url)
    expect(cell(quiet, 0, "unit_id")).to_have_text(HOTTEST)
    card = quiet.locator("#ranking-card-over-limit")
    card.click()
    count = quiet.locator("#ranking-count-over-limit").inner_text()
    expect(quiet.locator("#ranking-shown")).to_have_text(f"{count} units shown")
    expect(card).to_have_attribute("aria-pressed", "true")
    expect(quiet.locator("#ranking-chosen")).to_have_text("Hours over hot-spot limit above 0")
    quiet.get_by_label("Unit id contains").fill("0007")
    expect(quiet.locator("#ranking-shown")).to_have_text("1 unit shown")
    expect(quiet).to_have_url(re.compile("unit_id=contains:0007"))
    quiet.get_by_role("button", name="Show all").click()
    expect(quiet.locator("#ranking-shown")).to_have_text(f"{N_UNIT} units shown")
    expect(quiet.get_by_label("Unit id contains")).to_have_value("")
    quiet.get_by_role("textbox", name="Feeder").click()
    quiet.get_by_role("option", name=FEEDERS[1]).click()
    expect(cell(quiet, 0, "feeder")).to_have_text(FEEDERS[1])
    expect(quiet).to_have_url(re.compile(r"\?feeder=equals:LK-12\+Tannery$"))


def test_a_link_opens_the_view_it_was_sent_from(quiet: Page, fleet_url: str) -> None:
    """Filters and order come from the address, and the controls show them."""
    quiet.goto(
        f"{fleet_url}?feeder=equals:LK-21+Orchard&hours_over_rating=above:0&sort=-aging_factor"
    )
    expect(cell(quiet, 0, "feeder")).to_have_text("LK-21 Orchard")
    expect(quiet.get_by_role("textbox", name="Feeder")).to_have_value("LK-21 Orchard")
    expect(quiet.locator("#ranking-card-over-rating")).to_have_attribute("aria-pressed", "true")
    aging = [cell(quiet, row, "aging_factor").inner_text() for row in range(5)]
    assert [float(each) for each in aging] == sorted((float(each) for each in aging), reverse=True)
    shown = int(quiet.locator("#ranking-shown").inner_text().split()[0])
    assert 0 < shown < N_UNIT / 2


def test_a_mistyped_link_still_opens_and_says_so(quiet: Page, fleet_url: str) -> None:
    """Nobody takes the whole fleet for the part that was meant."""
    quiet.goto(f"{fleet_url}?sort=-colour")
    expect(quiet.locator("#ranking-message")).to_contain_text("'colour'")
    expect(cell(quiet, 0, "unit_id")).to_have_text(HOTTEST)


@pytest.mark.parametrize("by", ["link", "row", "keyboard"])
def test_a_row_opens_its_unit_and_the_way_back_keeps_the_view(
    quiet: Page, fleet_url: str, by: str
) -> None:
    """The figures of one unit are one press away, with or without a mouse."""
    quiet.goto(f"{fleet_url}?feeder=equals:LK-22+Quarry")
    expect(cell(quiet, 0, "unit_id")).to_have_text(HOTTEST)
    if by == "link":
        cell(quiet, 0, "unit_id").get_by_role("link").click()
    else:
        cell(quiet, 0, "peak_load_pct").click(trial=by == "keyboard")
    if by == "keyboard":
        quiet.get_by_role("button", name="Over rating").focus()
        cell(quiet, 0, "peak_load_pct").focus()
        quiet.keyboard.press("Enter")
    expect(quiet).to_have_url(f"{fleet_url}unit?unit_id={HOTTEST}")
    expect(quiet.get_by_role("heading", level=1)).to_have_text(HOTTEST)
    expect(quiet).to_have_title(f"{HOTTEST} - tracker")
    if by != "link":
        return
    quiet.get_by_role("link", name="← Ranking").click()
    expect(quiet).to_have_url(f"{fleet_url}?feeder=equals:LK-22+Quarry")
    expect(cell(quiet, 0, "feeder")).to_have_text("LK-22 Quarry")


def test_the_unit_page_draws_and_zooms(quiet: Page, fleet_url: str) -> None:
    """Four lines and the days' bars are on the screen; the quick range narrows all of them."""
    quiet.goto(f"{fleet_url}unit?unit_id={HOTTEST}")
    figure = quiet.locator("#unit-figure")
    expect(figure.locator(".scatterlayer .trace")).to_have_count(5)
    expect(figure.locator(".barlayer .point")).not_to_have_count(0)
    expect(figure).to_contain_text("hot-spot limit in force 140 °C")
    expect(figure).to_contain_text("rating 37.5 kVA")
    expect(quiet.locator("#unit-facts")).to_contain_text(f"1 of {N_UNIT}")
    expect(quiet.locator(".plate")).to_contain_text("derived")
    wait_for_days(quiet, 31, 31)
    plot = "document.querySelector('#unit-figure .js-plotly-plot')"
    hottest = quiet.evaluate(
        f"{plot}.calcdata[1].reduce((a, b) => (b.y > a.y ? b : a)).x / 1000"  # [s since 1970, UTC]
    )
    assert hottest == dt.datetime(2026, 7, 16, 23, tzinfo=dt.UTC).timestamp()
    quiet.get_by_text("Hottest week").click()
    wait_for_days(quiet, 7, 7)
    expect(quiet).to_have_url(re.compile("span=week"))
    quiet.reload()
    expect(figure.locator(".scatterlayer .trace")).to_have_count(5)
    wait_for_days(quiet, 7, 7)


def test_dragging_zooms_all_panels(quiet: Page, fleet_url: str) -> None:
    """A drag over one panel asks for that stretch, at full detail, in all of them."""
    quiet.goto(f"{fleet_url}unit?unit_id={GAPPY}")
    panel = quiet.locator("#unit-figure .nsewdrag").first
    expect(panel).to_be_visible()
    expect(quiet.locator("#unit-facts .key-figures")).to_be_visible()  # nothing moves any more
    panel.scroll_into_view_if_needed()
    box = panel.bounding_box()
    assert box is not None
    middle = box["y"] + box["height"] / 2
    quiet.mouse.move(box["x"] + box["width"] * 0.4, middle)
    quiet.mouse.down()
    quiet.mouse.move(box["x"] + box["width"] * 0.6, middle, steps=4)
    quiet.mouse.up()
    wait_for_days(quiet, 5, 8)


def test_a_unit_without_data_and_an_unknown_one_are_told(quiet: Page, fleet_url: str) -> None:
    """No empty axes, no blank page: words, and the way back."""
    quiet.goto(f"{fleet_url}unit?unit_id={NO_DATA}")
    expect(quiet.get_by_role("heading", level=1)).to_have_text(NO_DATA)
    expect(quiet.locator("#unit-news")).to_contain_text("No load is held")
    expect(quiet.locator("#unit-figure")).to_be_hidden()
    quiet.goto(f"{fleet_url}unit?unit_id=LK-99-9999")
    expect(quiet.get_by_role("heading", level=1)).to_have_text("Unit not found")
    expect(quiet.locator("#unit-head")).to_contain_text("LK-99-9999")
    expect(quiet.get_by_role("link", name="← Ranking")).to_be_visible()


def test_export_is_the_file_of_the_command(quiet: Page, fleet_url: str, fleet: Database) -> None:
    """The button gives byte for byte what `tracker export` writes."""
    quiet.goto(fleet_url)
    with quiet.expect_download() as download:
        quiet.get_by_role("link", name="Export priority list").click()
    assert download.value.suggested_filename == "priority_list.csv"
    assert download.value.path().read_bytes() == csv_text(priority_list(fleet)).encode()


def test_doubts_are_one_press_from_the_ranking(quiet: Page, fleet_url: str) -> None:
    """The page opens, says that hints are no verdicts, and keeps the feeder in its address."""
    quiet.goto(fleet_url)
    quiet.get_by_role("link", name="Connections in doubt").click()
    expect(quiet.get_by_role("heading", level=1)).to_have_text("Connections in doubt")
    expect(quiet.locator(".notice")).to_contain_text("not verdicts")
    expect(quiet.locator("#doubtful-shown")).to_have_text(re.compile(r"^\d+ doubts?$"))
    quiet.goto(f"{fleet_url}doubtful?feeder=LK-21+Orchard")
    expect(quiet.get_by_role("textbox", name="Feeder")).to_have_value("LK-21 Orchard")
    quiet.set_viewport_size({"width": 390, "height": 844})
    assert quiet.evaluate("document.documentElement.scrollWidth") <= 390
    quiet.get_by_role("link", name="← Ranking").click()
    expect(cell(quiet, 0, "unit_id")).to_have_text(HOTTEST)


def test_a_unit_short_of_data_is_told_apart(quiet: Page, fleet_url: str) -> None:
    """The word in its row, and the reason on its page."""
    quiet.goto(f"{fleet_url}?coverage_pct=below:80")
    expect(cell(quiet, 0, "place")).to_have_text("apart")
    expect(cell(quiet, 0, "peak_hot_spot_c")).to_contain_text("% of its energy is measured")
    quiet.goto(f"{fleet_url}unit?unit_id={GAPPY}")
    expect(quiet.locator("#unit-news")).to_contain_text("Ranked apart: only")
    expect(quiet.locator("#unit-facts")).to_contain_text("ranked apart")


@pytest.mark.parametrize("path", ["", f"unit?unit_id={HOTTEST}"], ids=["ranking", "unit"])
def test_a_phone_shows_it_all_and_the_cautions_stand(
    quiet: Page, fleet_url: str, path: str
) -> None:
    """On 390 pixels nothing runs out of the page sideways; cautions are there on both pages."""
    quiet.set_viewport_size({"width": 390, "height": 844})
    quiet.goto(f"{fleet_url}{path}")
    expect(
        quiet.locator("#unit-facts .key-figures" if path else "#ranking-count-all")
    ).to_be_visible()
    if path:
        expect(quiet.locator("#unit-figure .scatterlayer .trace")).to_have_count(5)
    else:
        expect(cell(quiet, 0, "unit_id")).to_have_text(HOTTEST)
    assert quiet.evaluate("document.documentElement.scrollWidth") <= 390
    expect(quiet.locator(".first-caution")).to_be_visible()
    for caution in CAUTIONS:
        expect(quiet.locator(".cautions").get_by_text(caution.matter)).to_be_visible()


def test_an_empty_store_names_the_first_steps(quiet: Page, empty: Database, served: object) -> None:
    """Nothing to rank yet: the commands to run, and no empty grid."""
    quiet.goto(served(empty))  # type: ignore[operator]
    expect(quiet.get_by_role("heading", name="The store is empty")).to_be_visible()
    expect(quiet.get_by_text("tracker import units units.csv")).to_be_visible()
    expect(quiet.locator("#ranking-body")).to_be_hidden()
