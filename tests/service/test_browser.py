"""The whole path in a real browser: upload, click, run, look, compare, download."""

import copy
import json
import os
import re
import time
from pathlib import Path

import numpy as np
import pytest

from bemescape.service.settings import Settings
from service.helpers import ball, order, ply_bytes, upload, wait_until_over
from service.in_process import Live

pytestmark = pytest.mark.slow
CHROMIUM = Path("/usr/bin/chromium")
SIZES = [(1280, 720), (1680, 1050)]
#: Where screenshots are kept, if someone wants to look at them.
SHOTS = os.environ.get("BEMESCAPE_SHOTS")
PATIENCE_MS = 600_000


@pytest.fixture(scope="module")
def browser():
    if not CHROMIUM.exists():
        pytest.skip(f"{CHROMIUM} is not installed")
    playwright = pytest.importorskip("playwright.sync_api")
    with playwright.sync_playwright() as started:
        browser = started.chromium.launch(
            executable_path=str(CHROMIUM), args=["--no-sandbox", "--use-gl=angle", "--use-angle=swiftshader"]
        )
        yield browser
        browser.close()


@pytest.fixture(scope="module")
def own(tmp_path_factory):
    """A service of its own: what other tests leave behind would be on its shelf."""
    server = Live(Settings(data=tmp_path_factory.mktemp("browser"), second_opinion=False, slots=1))
    yield server
    server.close()


@pytest.fixture(scope="module")
def finished(own):
    """A run that is done, ordered over HTTP."""
    towards = np.array([0.55, -0.75, 0.45])
    disc = {"centre": list(towards / np.linalg.norm(towards)), "radius": "400 nm"}
    vertices, faces, _ = ball(3)
    with own.client() as client:
        surface = upload(client, ply_bytes(vertices, faces)).json()["id"]
        run = client.post("/api/runs", json=order(surface, window=[{"name": "pore", "disc": disc}])).json()
        record = wait_until_over(client, run["id"], seconds=900)
    assert record["state"] == "done", record["reason"]
    return record


@pytest.fixture
def page(browser, own):
    context = browser.new_context(viewport={"width": SIZES[0][0], "height": SIZES[0][1]}, accept_downloads=True)
    page = context.new_page()
    page.set_default_timeout(PATIENCE_MS)
    page.complaints, page.asked = [], []
    page.on("console", lambda message: page.complaints.append(message.text) if message.type == "error" else None)
    page.on("pageerror", lambda error: page.complaints.append(str(error)))
    page.on("request", lambda request: page.asked.append(request.url))
    yield page
    context.close()
    foreign = [url for url in page.asked if not url.startswith((own.url, "data:", "blob:"))]
    assert foreign == []
    # A refusal that the page shows is also reported by the browser; anything else is a fault.
    faults = [text for text in page.complaints if "status of 4" not in text and "GPU stall" not in text]
    assert faults == []


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
    return page.evaluate(f"window.bemescape.{what}")


def wait_for(page, condition):
    # Asked again and again from here: the page's policy forbids the evaluation that a waiting browser would do.
    ends = time.monotonic() + PATIENCE_MS / 1000
    while not page.evaluate(f"Boolean(window.bemescape && ({condition}))"):
        assert time.monotonic() < ends, condition
        page.wait_for_timeout(50)


def place_by_click(page, own, place):
    """Add a window and click where `place` (µm) is on the screen."""
    page.click("#add-window")
    x, y = page.evaluate("place => window.bemescape.onScreen(place)", place)
    page.mouse.move(x, y)
    page.wait_for_timeout(200)
    page.mouse.click(x, y)


def test_from_upload_to_report(page, own, tmp_path):
    mesh = tmp_path / "ball.ply"
    mesh.write_bytes(ply_bytes(*ball(3)))
    page.goto(own.url)
    page.wait_for_selector("[data-demo=bouton]")
    shoot(page, "1_empty")

    page.set_input_files("#file", str(mesh))
    page.select_option("#unit", "um")
    page.click("#upload")
    wait_for(page, "window.bemescape.surface === 1280")
    # The camera looks along (0.55, −0.75, 0.45) from outside: that end of the ball faces it.
    towards = np.array([0.55, -0.75, 0.45])
    towards /= np.linalg.norm(towards)
    place_by_click(page, own, list(0.995 * towards))
    wait_for(page, "window.bemescape.windows.length === 1")
    window = state(page, "windows")[0]
    np.testing.assert_allclose(window["place_um"], towards, atol=0.02)  # a few pixels of 300 to a radius
    radius = page.input_value("[data-field=radius]")
    assert re.fullmatch(r"[\d.]+ (nm|um)", radius)
    page.fill("[data-field=radius]", "400 nm")
    wait_for(page, "window.bemescape.windows[0]?.area_um2 > 0.4")
    area = state(page, "windows")[0]["area_um2"]
    # The part of a sphere within r of a point has the area π r²; facets of the icosphere take some of it.
    np.testing.assert_allclose(area, np.pi * 0.4**2, rtol=0.05)
    shoot(page, "2_placed")

    page.fill("#diffusion", "1")
    page.select_option("#target", "other")
    page.fill("#target-text", "20 %")
    page.click("#run")
    page.wait_for_selector("#progress-text")
    shoot(page, "3_running")
    page.wait_for_selector("#mean-time")
    wait_for(page, "window.bemescape.shown !== null && window.bemescape.scale !== null")
    page.wait_for_selector("#regions button")
    page.wait_for_selector("#downloads a[download='report.html']")
    shoot(page, "4_answer")

    with own.client() as client:
        run = client.get("/api/runs").json()[0]
        summary = client.get(f"/api/runs/{run['id']}/summary").json()
    shown = page.inner_text("#mean-time")
    assert float(re.match(r"[\d.]+", shown).group()) == pytest.approx(summary["mean_time_s"], rel=1e-3)
    assert "100 %" in page.inner_text("#shares")
    with page.expect_download() as download:
        page.click("#downloads a[download='report.html']")
    report = Path(download.value.path()).read_text()
    assert "not for clinical or dosing decisions" in report
    with page.expect_download() as download:
        page.click("#picture")
    assert Path(download.value.path()).read_bytes().startswith(b"\x89PNG")


def test_looking_at_a_result_and_sharing_the_view(page, own, browser, finished):
    page.goto(f"{own.url}/#run={finished['id']}")
    wait_for(page, "window.bemescape.shown !== null && window.bemescape.scale !== null")
    canvas = page.locator("#view").bounding_box()
    middle = (canvas["x"] + canvas["width"] / 2, canvas["y"] + (canvas["height"] - 56) / 2)
    page.mouse.move(*middle)
    wait_for(page, "document.querySelector('#pointer').textContent.includes('µm')")

    page.locator("#slow").fill("30")
    wait_for(page, "document.querySelector('#regions').textContent.includes('30 %')")
    page.select_option("#scale", "log")
    assert state(page, "scale")["log"] is True
    page.select_option("#clip", "y")
    page.check("#inside")
    wait_for(page, "window.bemescape.section !== null")
    shoot(page, "5_cut")
    page.select_option("#colour", "exits")
    shoot(page, "6_exits")
    page.select_option("#colour", "time")

    page.focus("#view")
    before = state(page, "view")["camera"]
    page.keyboard.press("ArrowLeft")
    wait_for(page, f"JSON.stringify(window.bemescape.view.camera) !== {json.dumps(json.dumps(before))}")
    link, view = page.evaluate("location.hash"), state(page, "view")
    other = browser.new_page()
    other.goto(f"{own.url}/{link}")
    wait_for(other, "window.bemescape && window.bemescape.shown !== null")
    seen = state(other, "view")
    other.close()
    for key in ("run", "slow", "log", "clip", "inside", "colour"):
        assert seen[key] == view[key], key
    np.testing.assert_allclose(seen["camera"], view["camera"], rtol=1e-3, atol=1e-3)


def test_two_runs_side_by_side_have_one_scale(page, own, finished):
    first = finished
    with own.client() as client:
        vertices, faces, _ = ball(3)
        double = upload(client, ply_bytes(2 * vertices, faces), name="twice.ply").json()
        body = {**copy.deepcopy(first["order"]), "surface": double["id"], "name": "twice as wide"}
        body["window"][0]["disc"]["centre"] = [2 * x for x in body["window"][0]["disc"]["centre"]]
        second = wait_until_over(client, client.post("/api/runs", json=body).json()["id"])
        assert second["state"] == "done", second["reason"]
    page.goto(own.url)
    for run in (first, second):
        page.check(f"[data-run='{run['id']}'] input")
    page.click("#compare")
    wait_for(page, "window.bemescape.panes === 2")
    assert state(page, "scale")["high"] == pytest.approx(second["answer"]["slowest_time_s"], rel=1e-5)
    assert page.locator("#compared tbody tr").count() == 2
    shoot(page, "7_compare")


def test_a_nasty_shape_shows_where_it_is_bad(page, own, tmp_path):
    vertices, faces, _ = ball(3)
    mesh = tmp_path / "torn.ply"
    mesh.write_bytes(ply_bytes(vertices, np.delete(faces, range(100, 330), axis=0)))
    page.goto(own.url)
    page.set_input_files("#file", str(mesh))
    page.select_option("#unit", "um")
    page.click("#upload")
    page.wait_for_selector("#verdict")
    assert page.inner_text("#verdict")
    shoot(page, "8_nasty")
    # A file that is none: one sentence, and the page goes on.
    page.click("#other-shape")
    rubbish = tmp_path / "rubbish.ply"
    rubbish.write_bytes(b"ply\nnothing")
    page.set_input_files("#file", str(rubbish))
    page.click("#upload")
    wait_for(page, "document.querySelector('#message.bad')?.textContent.length > 20")
    assert page.is_enabled("#upload")


def test_a_demo_by_keyboard_alone(page, own):
    page.goto(own.url)
    page.wait_for_selector("[data-demo=spine]")
    for _ in range(40):
        page.keyboard.press("Tab")
        if page.evaluate("document.activeElement.dataset.demo") == "spine":
            break
    page.keyboard.press("Enter")
    wait_for(page, "window.bemescape.windows.length === 1")
    for _ in range(60):
        page.keyboard.press("Tab")
        if page.evaluate("document.activeElement.id") == "run":
            break
    else:
        raise AssertionError("the button that starts a run cannot be reached by Tab")
    shoot(page, "9_demo")
