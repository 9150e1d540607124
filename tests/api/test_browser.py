"""The page about the doors in a real browser: it shows them, says nothing on the console, and asks nobody else."""

import os
import threading
from pathlib import Path

import pytest
from playwright.sync_api import expect, sync_playwright
from werkzeug.serving import make_server

pytestmark = pytest.mark.browser

CHROMIUM = Path("/usr/bin/chromium")


@pytest.fixture
def page():
    if not CHROMIUM.exists():
        reason = f"{CHROMIUM} is not installed: on Debian, apt-get install chromium"
        if os.environ.get("ROLLBOOK_TEST_NO_SKIP") == "1":
            pytest.fail(reason)
        pytest.skip(reason)
    with sync_playwright() as play:
        options = ["--no-sandbox", "--disable-gpu", "--disable-background-networking"]
        browser = play.chromium.launch(executable_path=str(CHROMIUM), args=options)
        yield browser.new_page()
        browser.close()


@pytest.fixture
def address(app):
    server = make_server("127.0.0.1", 0, app, threaded=True)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    yield f"http://127.0.0.1:{server.server_port}"
    server.shutdown()
    thread.join()
    server.server_close()


def test_the_page_shows_every_door_and_asks_nobody_else(page, address, document):
    said, asked = [], []
    page.on("console", lambda message: said.append(message.text))
    page.on("pageerror", lambda error: said.append(str(error)))
    page.on("request", lambda request: asked.append(request.url))
    page.goto(f"{address}/api/v1/docs")
    doors = sum(len(item) for item in document["paths"].values())
    expect(page.locator(".opblock")).to_have_count(doors)
    page.locator(".opblock", has_text="What a vehicle is to load at boot").locator("button").first.click()
    expect(page.get_by_text("nothing-in-force").first).to_be_visible()
    assert said == []
    assert all(url.startswith((address, "data:")) for url in asked), asked
