"""The page in a real browser: it draws without faults or requests, and its controls work.

Skipped only where no browser named chromium is installed.
"""

import shutil
import time
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pytest
from playwright.sync_api import Browser, Page, sync_playwright

from simulator.report.page import write_page
from tests.report.conftest import HOSTILE, record, results

SCREEN = {"width": 1200, "height": 900}
CHROMIUM = shutil.which("chromium")
ARGUMENTS = [
    "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
]  # fmt: skip
MAP_COLOURS = (
    "[...document.querySelectorAll('#plot-map .points path')].map((dot) => dot.style.fill)"
)
pytestmark = pytest.mark.skipif(CHROMIUM is None, reason="no browser named chromium is installed")


@pytest.fixture(scope="module")
def address(tmp_path_factory) -> str:
    path = tmp_path_factory.mktemp("page") / "page.html"
    write_page(results(), record(), path)
    return path.as_uri()


@pytest.fixture(scope="module")
def browser() -> Iterator[Browser]:
    with sync_playwright() as playwright:
        started = playwright.chromium.launch(
            executable_path=CHROMIUM, headless=True, args=ARGUMENTS
        )
        yield started
        started.close()


@dataclass
class Watched:
    """An open page and what went wrong in it: console messages, errors, dialogs, requests."""

    page: Page
    faults: list[str]


def opened(browser: Browser, address: str) -> Watched:
    page, faults = browser.new_page(viewport=SCREEN, color_scheme="light"), []
    page.on("console", lambda message: faults.append(f"{message.type}: {message.text}"))
    page.on("pageerror", lambda error: faults.append(f"error: {error}"))
    page.on("dialog", lambda dialog: (faults.append("dialog"), dialog.dismiss()))
    page.on("request", lambda request: faults.append(request.url) if _leaves(request.url) else None)
    page.goto(address)
    page.wait_for_selector("#plot-map .main-svg")
    return Watched(page, faults)


@pytest.fixture(scope="module")
def shared(browser, address) -> Watched:
    return opened(browser, address)


@pytest.fixture
def page(shared) -> Iterator[Page]:
    """The page, opened once for all tests that leave it as it was."""
    shared.page.set_viewport_size(SCREEN)
    shared.page.emulate_media(color_scheme="light")
    yield shared.page
    assert shared.faults == []


@pytest.fixture
def fresh(browser, address) -> Iterator[Page]:
    """The page, opened anew for a test that changes it."""
    watched = opened(browser, address)
    yield watched.page
    watched.page.close()
    assert watched.faults == []


def eventually(page: Page, expression: str) -> None:
    """Wait until an expression is true; the page's policy forbids the waiting that Playwright brings."""
    deadline = time.monotonic() + 10
    while not page.evaluate(expression):
        assert time.monotonic() < deadline, expression
        page.wait_for_timeout(50)


def _leaves(url: str) -> bool:
    return not url.startswith(("file:", "data:", "blob:"))


def test_every_chart_is_drawn(page):
    names = page.evaluate("[...document.querySelectorAll('.plot')].map((plot) => plot.id)")
    assert len(names) == 8
    for name in names:
        assert page.locator(f"#{name} .main-svg").count(), name


def test_pointing_at_a_unit_says_why_it_is_on(page):
    plot = page.locator("#plot-fleet")
    plot.scroll_into_view_if_needed()
    area = page.locator("#plot-fleet .nsewdrag").bounding_box()
    codes = results()["unit_reason"].to_numpy()
    for unit, code, said in [(0, 1, "in the money"), (1, 3, "start, kept on to save a start")]:
        hour = np.flatnonzero(codes[:, unit] == code)[0]
        across, down = (hour + 0.7) / len(codes), (unit + 0.5) / 2  # of two that were ever on
        page.mouse.move(area["x"] + area["width"] * across, area["y"] + area["height"] * down)
        eventually(
            page,
            f"document.querySelector('#plot-fleet .hoverlayer').textContent.includes('{said}')",
        )
    lifted = page.evaluate(
        "[...new Set(document.getElementById('plot-fleet').data[0].z[1])].sort()"
    )
    assert lifted == [0, 3]


def test_the_slider_moves_the_map_by_keyboard(page):
    slider = page.locator("#map-step")
    slider.focus()
    page.keyboard.press("Home")
    eventually(
        page, "document.querySelector('#map-label').textContent.includes('Sat 30 Oct 00:00')"
    )
    before, words = page.evaluate(MAP_COLOURS), page.locator("#map-now").text_content()
    for _ in range(3):
        page.keyboard.press("ArrowRight")
    assert page.locator("#map-label").text_content() == "Sat 30 Oct 03:00"
    assert slider.get_attribute("aria-valuetext") == "Sat 30 Oct 03:00"
    assert page.locator("#map-now").text_content() != words
    eventually(page, f"{MAP_COLOURS}.join() !== '{','.join(before)}'")


def test_the_map_says_which_lines_are_at_their_limit(page):
    page.locator("#map-step").focus()
    page.keyboard.press("Home")
    said = [page.locator("#map-now").text_content()]
    for _ in range(20):
        page.keyboard.press("ArrowRight")
        said.append(page.locator("#map-now").text_content())
    assert any("At their limit: L1 b" in words for words in said)
    assert any("No line at its limit." in words for words in said)


def test_play_moves_on_and_pauses(page):
    page.locator("#map-step").evaluate("(slider) => { slider.value = 0; }")
    page.get_by_role("button", name="Play").click()
    eventually(page, "Number(document.getElementById('map-step').value) >= 2")
    page.get_by_role("button", name="Pause").click()
    assert page.get_by_role("button", name="Play").get_attribute("aria-pressed") == "false"


def test_pointing_at_the_price_picture_shows_the_parts(page):
    picture = page.locator("#plot-prices .nsewdrag").first
    picture.scroll_into_view_if_needed()
    box = picture.bounding_box()
    page.mouse.move(box["x"] + box["width"] * 24.5 / 48, box["y"] + box["height"] / 10)
    label = page.locator("#plot-prices .hoverlayer .hovertext")
    label.wait_for()
    text = label.text_content()
    assert text.startswith(f"{HOSTILE}Sun 31 Oct 00:00price ")
    places = [text.index(part) for part in ("EUR/MWh", "energy ", "congestion ", "loss ")]
    assert places == sorted(places)


def test_enlarging_the_price_picture_names_the_hours(fresh):
    ticks = (
        "[...document.querySelectorAll('#plot-prices .xtick text')].map((tick) => tick.textContent)"
    )
    picture = fresh.locator("#plot-prices .nsewdrag").first
    picture.scroll_into_view_if_needed()
    box = picture.bounding_box()
    fresh.mouse.move(box["x"] + box["width"] * 0.3, box["y"] + 5)
    fresh.mouse.down()
    fresh.mouse.move(box["x"] + box["width"] * 0.45, box["y"] + box["height"] - 5, steps=4)
    fresh.mouse.up()
    eventually(fresh, f"{ticks}.some((text) => text.startsWith('17:00'))")


def test_hostile_names_are_shown_as_text(page):
    assert page.locator("#plot-map text", has_text=HOSTILE).count()
    assert page.locator("#plot-prices .ytick text", has_text=HOSTILE).count()
    assert page.locator("th", has_text=HOSTILE).count()
    assert "L1 b" in page.locator("#congestion").text_content()


def test_the_readers_dark_setting_is_followed(page):
    light = page.evaluate("getComputedStyle(document.body).backgroundColor")
    fill = page.locator("#plot-map text").first.evaluate("(text) => text.style.fill")
    page.emulate_media(color_scheme="dark")
    eventually(page, "document.documentElement.dataset.theme === 'dark'")
    assert page.evaluate("getComputedStyle(document.body).backgroundColor") != light
    assert page.locator("#plot-map text").first.evaluate("(text) => text.style.fill") != fill


def test_the_button_turns_the_theme_and_keeps_it(fresh):
    fresh.get_by_role("button", name="Switch to the dark theme").click()
    assert fresh.evaluate("document.documentElement.dataset.theme") == "dark"
    fresh.emulate_media(color_scheme="dark")
    fresh.get_by_role("button", name="Switch to the light theme").click()
    for scheme in ("light", "dark"):
        fresh.emulate_media(color_scheme=scheme)
        eventually(fresh, f"matchMedia('(prefers-color-scheme: {scheme})').matches")
        fresh.wait_for_timeout(200)  # long enough for a page that follows to have followed
    assert fresh.evaluate("document.documentElement.dataset.theme") == "light"


def test_tables_sort_by_their_headings(page):
    heading = page.locator("#units th", has_text="Start cost")
    heading.get_by_role("button").click()
    assert heading.get_attribute("aria-sort") == "descending"
    names = page.locator("#units tbody th")
    assert names.first.text_content() == "Gasholt 1"
    heading.get_by_role("button").press("Enter")
    assert heading.get_attribute("aria-sort") == "ascending"
    assert names.last.text_content() == "Gasholt 1"


def test_focus_is_visible(fresh):
    fresh.keyboard.press("Tab")
    assert fresh.evaluate("document.activeElement.className") == "skip"
    fresh.locator("#map-play").focus()
    fresh.keyboard.press("Tab")
    outline = fresh.evaluate("getComputedStyle(document.activeElement).outlineStyle")
    assert fresh.evaluate("document.activeElement.id") == "map-step"
    assert outline == "solid"


def test_a_narrow_screen_needs_no_sideways_scrolling(page):
    page.set_viewport_size({"width": 420, "height": 800})
    eventually(page, "document.querySelector('#plot-dispatch .main-svg').clientWidth < 420")
    assert page.evaluate("document.documentElement.scrollWidth") <= 420


def test_printing_fits_paper_and_leaves_the_screen_as_it_was(fresh):
    fresh.emulate_media(color_scheme="dark")
    eventually(fresh, "document.documentElement.dataset.theme === 'dark'")
    widths = (
        "[...document.querySelectorAll('.plot .main-svg')].map((svg) => svg.getAttribute('width'))"
    )
    before = fresh.evaluate(widths)
    fresh.evaluate("dispatchEvent(new Event('beforeprint'))")
    assert {float(width) for width in fresh.evaluate(widths)} == {670.0}
    assert fresh.evaluate("document.documentElement.dataset.theme") == "light"
    fresh.evaluate("dispatchEvent(new Event('afterprint'))")
    eventually(fresh, f"JSON.stringify({widths}) === JSON.stringify({before})")
    assert fresh.evaluate("document.documentElement.dataset.theme") == "dark"
    assert fresh.pdf().startswith(b"%PDF")
