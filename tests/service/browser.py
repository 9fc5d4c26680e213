"""A browser for the tests: pages that may not complain, waiting on the page's state, screenshots, what it shows."""

import gzip
import os
import re
import time
from contextlib import contextmanager
from pathlib import Path

CHROMIUM = Path("/usr/bin/chromium")
SIZES = [(1280, 720), (1920, 1080)]
#: Where screenshots are kept, if someone wants to look at them.
SHOTS = os.environ.get("BEMESCAPE_SHOTS")
PATIENCE_MS = 600_000
SOFTWARE_3D = ("--use-gl=angle", "--use-angle=swiftshader")


@contextmanager
def launched(playwright, *options):
    """Debian's browser; `.ci/run` installs it, and without it these tests fail rather than pass unseen."""
    assert CHROMIUM.exists(), f"{CHROMIUM} is not there; install chromium"
    browser = playwright.chromium.launch(executable_path=str(CHROMIUM), args=["--no-sandbox", *options])
    yield browser
    browser.close()


@contextmanager
def watched_page(browser, own):
    """A page that may neither complain nor ask another host."""
    context = browser.new_context(viewport={"width": SIZES[0][0], "height": SIZES[0][1]}, accept_downloads=True)
    page = context.new_page()
    page.set_default_timeout(PATIENCE_MS)
    complaints, asked = [], []
    page.on("console", lambda message: complaints.append(message.text) if message.type == "error" else None)
    page.on("pageerror", lambda error: complaints.append(str(error)))
    page.on("request", lambda request: asked.append(request.url))
    yield page
    context.close()
    assert [url for url in asked if not url.startswith((own.url, "data:", "blob:"))] == []
    # A refusal that the page shows is also reported by the browser; anything else is a fault.
    assert [text for text in complaints if "status of 4" not in text and "GPU stall" not in text] == []


def shoot(page, name):
    if SHOTS:
        Path(SHOTS).mkdir(exist_ok=True)
        for width, height in SIZES:
            page.set_viewport_size({"width": width, "height": height})
            page.wait_for_timeout(300)
            page.screenshot(path=f"{SHOTS}/{name}_{width}.png")
        page.set_viewport_size({"width": SIZES[0][0], "height": SIZES[0][1]})
        page.wait_for_timeout(200)


def state(page, what):
    """A part of what the page says of itself."""
    return page.evaluate(f"window.bemescape.{what}")


def wait_for(page, condition):
    # Asked again and again from here: the page's policy forbids the evaluation that a waiting browser would do.
    ends = time.monotonic() + PATIENCE_MS / 1000
    while not page.evaluate(f"Boolean(window.bemescape && ({condition}))"):
        assert time.monotonic() < ends, condition
        page.wait_for_timeout(50)


@contextmanager
def placing(page):
    """What the page is told of true windows meanwhile: headers and arrays, newest last."""
    from bemescape.service.buffers import unpacked

    found = []
    answers = []
    page.on("response", lambda answer: answers.append(answer) if answer.url.endswith("/windows") else None)
    yield found
    found += [unpacked(gzip.compress(answer.body())) for answer in answers if answer.ok]


def click_wall(page, place):
    """Click where a place (µm) is on the screen."""
    x, y = page.evaluate("place => window.bemescape.onScreen(place)", place)
    page.mouse.move(x, y)
    page.wait_for_timeout(200)
    page.mouse.click(x, y)


def first_number(text):
    return float(re.search(r"[\d.]+", text).group())


def answered(page, own):
    """Wait for the whole answer of the run that is computed; its summary as the service has it."""
    page.wait_for_selector("#mean-time")
    wait_for(page, "window.bemescape.shown !== null && window.bemescape.scale !== null")
    page.wait_for_selector("#regions button")
    page.wait_for_selector("#downloads a[download='report.html']")
    with own.client() as client:
        return client.get(f"/api/runs/{state(page, 'view')['run']}/summary").json()


def downloaded(page, selector):
    with page.expect_download() as download:
        page.click(selector)
    return Path(download.value.path()).read_bytes()
