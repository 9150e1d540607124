"""The pages in a real browser: no console message, no request elsewhere, nothing wider than the screen."""

from __future__ import annotations

import os
import re
import threading
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path

import pytest
from flask import Flask
from playwright.sync_api import Browser, BrowserContext, Page, expect, sync_playwright
from werkzeug.serving import make_server

from registry.services import Services
from registry.storage import alerts
from tests.web.yard import PASSWORD, Yard

pytestmark = pytest.mark.browser

CHROMIUM = Path("/usr/bin/chromium")
OPTIONS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]


@pytest.fixture(scope="module")
def browser() -> Iterator[Browser]:
    if not CHROMIUM.exists():
        reason = f"{CHROMIUM} is not installed: on Debian, apt-get install chromium"
        if os.environ.get("ROLLBOOK_TEST_NO_SKIP") == "1":
            pytest.fail(reason)
        pytest.skip(reason)
    with sync_playwright() as play:
        running = play.chromium.launch(executable_path=str(CHROMIUM), args=OPTIONS)
        yield running
        running.close()


@pytest.fixture
def address(app: Flask) -> Iterator[str]:
    """The application served on a loopback port of its own."""
    server = make_server("127.0.0.1", 0, app, threaded=True)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    yield f"http://127.0.0.1:{server.server_port}"
    server.shutdown()
    thread.join()
    server.server_close()


@dataclass
class Watched:
    """A page whose every console message and request is noted."""

    page: Page
    address: str
    console: list[str] = field(default_factory=list)
    outside: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.page.on("console", lambda message: self.console.append(f"{self.page.url}: {message.text}"))
        self.page.on("pageerror", lambda error: self.console.append(f"{self.page.url}: {error}"))
        self.page.on("request", lambda request: self._note(request.url))

    def _note(self, url: str) -> None:
        if not url.startswith((self.address, "data:")):
            self.outside.append(url)

    def open(self, path: str) -> Page:
        response = self.page.goto(self.address + path)
        assert response is not None
        assert response.status == 200, (path, response.status)
        return self.page

    def sign_in(self, name: str) -> None:
        self.open("/")
        self.page.get_by_label("Name", exact=True).fill(name)
        self.page.get_by_label("Password", exact=True).fill(PASSWORD)
        self.page.get_by_role("button", name="Sign in", exact=True).click()
        expect(self.page).to_have_url(self.address + "/")

    def charts_drawn(self, count: int) -> None:
        expect(self.page.locator("[data-drawn]")).to_have_count(count)
        expect(self.page.locator("[data-drawn] canvas")).to_have_count(count)

    def is_quiet(self) -> None:
        # What the page still loads may speak too; and a server whose browser leaves in mid-answer drops an open file.
        self.page.wait_for_load_state("networkidle")
        assert self.console == []
        assert self.outside == []

    def fits(self) -> None:
        """Nothing reaches beyond the right edge of the screen, or is cut off there."""
        wider = self.page.evaluate(
            """() => [...document.querySelectorAll('body *')]
                .filter(e => !e.closest('.skip, thead, noscript') && e.getClientRects().length)
                .filter(e => e.getBoundingClientRect().right > document.documentElement.clientWidth + 0.5
                          || (e.scrollWidth > e.clientWidth + 1 && getComputedStyle(e).overflowX !== 'visible'
                              && !['INPUT', 'TEXTAREA', 'SELECT'].includes(e.tagName)))
                .map(e => e.outerHTML.slice(0, 120))"""
        )
        assert wider == [], self.page.url
        assert self.page.evaluate("document.documentElement.scrollWidth <= document.documentElement.clientWidth")


def context_of(browser: Browser, width: int, scheme: str, *, scripts: bool = True) -> BrowserContext:
    return browser.new_context(
        viewport={"width": width, "height": 900},
        color_scheme="dark" if scheme == "dark" else "light",
        java_script_enabled=scripts,
    )


def paths_of(yard: Yard) -> dict[str, int]:
    """Every page, and how many charts it draws."""
    return {
        "/": 0,
        "/vehicles/tub-7": 4,
        "/vehicles/tub-8": 0,
        f"/runs/{yard.run.run_id}": 2,
        f"/calibrations/{yard.proposal.calibration_id}": 0,
        "/alerts": 0,
        "/journal": 0,
    }


@pytest.mark.parametrize(("width", "scheme"), [(1440, "light"), (1440, "dark"), (390, "light"), (390, "dark")])
def test_every_page_is_quiet_and_fits_the_screen(
    browser: Browser, address: str, yard: Yard, width: int, scheme: str
) -> None:
    with context_of(browser, width, scheme) as context:
        watched = Watched(context.new_page(), address)
        watched.sign_in("Abel")
        for path, charts in paths_of(yard).items():
            page = watched.open(path)
            expect(page.locator("h1")).to_have_count(1)
            watched.charts_drawn(charts)
            watched.fits()
            for summary in page.locator("details > summary").all():
                summary.click()
            watched.fits()
        watched.is_quiet()


def test_charts_follow_the_shade_and_the_width_of_the_screen(browser: Browser, address: str, yard: Yard) -> None:
    with context_of(browser, 1440, "light") as context:
        watched = Watched(context.new_page(), address)
        watched.sign_in("Rea")
        page = watched.open("/vehicles/tub-7")
        watched.charts_drawn(4)
        first = page.locator("[data-chart]").first
        expect(first).to_have_attribute("data-drawn", re.compile("^light "))
        page.emulate_media(color_scheme="dark")
        expect(first).to_have_attribute("data-drawn", re.compile("^dark "))
        charts = page.locator("[data-chart]").all()
        for chart in charts:
            expect(chart).to_have_attribute("data-drawn", re.compile("^dark "))
        wide = [chart.get_attribute("data-drawn") or "" for chart in charts]
        page.set_viewport_size({"width": 390, "height": 900})
        # Each is drawn anew after its own answer; the page fits when the last one is.
        for chart, before in zip(charts, wide, strict=True):
            expect(chart).not_to_have_attribute("data-drawn", before)
        watched.fits()
        watched.is_quiet()


def test_values_show_where_the_pointer_rests_on_a_chart(browser: Browser, address: str, yard: Yard) -> None:
    with context_of(browser, 1440, "light") as context:
        watched = Watched(context.new_page(), address)
        watched.sign_in("Rea")
        page = watched.open("/vehicles/tub-7")
        watched.charts_drawn(4)
        canvas = page.locator("[data-drawn] canvas").first
        box = canvas.bounding_box()
        assert box is not None
        tip = page.locator("#vg-tooltip-element.visible")
        # Six tenths of the way is under calibration 2, above its estimates and within its corridor.
        canvas.hover(position={"x": 0.6 * box["width"], "y": 0.25 * box["height"]})
        expect(tip).to_contain_text("calibration 2, tolerance")
        watched.is_quiet()


def test_an_alert_is_acknowledged_in_the_browser(
    browser: Browser, address: str, yard: Yard, services: Services
) -> None:
    with context_of(browser, 390, "light") as context:
        watched = Watched(context.new_page(), address)
        watched.sign_in("Tove")
        page = watched.open("/alerts")
        page.get_by_text("Acknowledge", exact=True).first.click()
        page.get_by_label("Note").fill("will tension the track after the shift")
        page.get_by_role("button", name="Acknowledge").click()
        expect(page.get_by_role("status")).to_contain_text("Acknowledged.")
        expect(page.get_by_text("will tension the track after the shift")).to_be_visible()
        watched.is_quiet()
    with services.read() as c:
        assert alerts.by_id(c, yard.alert.alert_id).standing == "acknowledged"


def test_a_calibration_is_put_into_force_by_the_keyboard_alone(browser: Browser, address: str, yard: Yard) -> None:
    with context_of(browser, 1440, "light") as context:
        watched = Watched(context.new_page(), address)
        watched.sign_in("Abel")
        page = watched.open(f"/calibrations/{yard.proposal.calibration_id}")
        page.get_by_label("Reason").first.focus()
        page.keyboard.type("the runs agree")
        button = page.get_by_role("button", name="Put calibration 3 into force")
        for _ in range(10):
            page.keyboard.press("Tab")
            if button.evaluate("e => e === document.activeElement"):
                break
        page.keyboard.press("Enter")
        expect(page.get_by_role("status")).to_contain_text("Calibration 3 is in force.")
        watched.is_quiet()


def test_without_scripts_the_job_is_done_and_the_charts_are_pictures(
    browser: Browser, address: str, yard: Yard
) -> None:
    with context_of(browser, 1440, "dark", scripts=False) as context:
        watched = Watched(context.new_page(), address)
        watched.sign_in("Tove")
        page = watched.open("/vehicles/tub-7")
        pictures = page.locator(".canvas img")
        expect(pictures).to_have_count(4)
        for picture in pictures.all():
            picture.scroll_into_view_if_needed()
            expect(picture).to_be_visible()
            assert (picture.bounding_box() or {"height": 0})["height"] > 100
        page.get_by_text("Record maintenance", exact=True).first.click()
        page.get_by_label("What was done").select_option("pressure_set")
        page.get_by_label("Done at (UTC)").fill("2026-03-01T10:00")
        page.get_by_role("button", name="Record maintenance").click()
        expect(page.get_by_role("status")).to_contain_text("Recorded: tyre pressure set.")
        assert watched.outside == []


def test_signing_out_ends_at_the_sign_in_page(browser: Browser, address: str, yard: Yard) -> None:
    with context_of(browser, 390, "dark") as context:
        watched = Watched(context.new_page(), address)
        watched.sign_in("Rea")
        watched.page.get_by_role("button", name="Sign out").click()
        expect(watched.page).to_have_url(address + "/sign-in")
        watched.fits()
        watched.is_quiet()
