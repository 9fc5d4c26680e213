"""Looking at results in a real browser: cuts, colours, comparison, studies, kinds of windows, the keyboard."""

import copy
import json

import numpy as np
import pytest

from service.browser import click_wall, launched, shoot, state, wait_for, watched_page
from service.helpers import CAP, ball, order, ply_bytes, tell, upload, wait_until_over

pytestmark = pytest.mark.slow


def solved(own, surface, **more):
    with own.client() as client:
        run = client.post("/api/runs", json=order(surface, **more)).json()
        record = wait_until_over(client, run["id"], seconds=900)
    assert record["state"] == "done", record["reason"]
    return record


@pytest.fixture(scope="module")
def balls(own):
    """Four runs: a ball under two windows, and two other sizes of it."""
    vertices, faces, labels = ball()
    start = {"points": {"middle": [0.0, 0.0, 0.0]}}
    both = [CAP, {"name": "pore", "disc": {"centre": [0.55, -0.75, 0.45], "radius": "300 nm"}}]
    with own.client() as client:
        shapes = [
            upload(client, ply_bytes(scale * vertices, faces, labels), name=f"ball {scale}.ply").json()["id"]
            for scale in (1.0, 2.0, 1.5)
        ]
    runs = [solved(own, shapes[0], name="cap and pore", window=both, start=start)]
    runs += [solved(own, shape, name=f"cap {k}") for k, shape in enumerate(shapes)]
    return shapes, runs


def open_run(page, own, record):
    page.goto(f"{own.url}/#run={record['id']}")
    wait_for(page, "window.bemescape.shown !== null && window.bemescape.scale !== null")


def test_values_slow_regions_cuts_colours_and_a_shared_view(page, own, browser, balls):
    open_run(page, own, balls[1][0])
    canvas = page.locator("#view").bounding_box()
    page.mouse.move(canvas["x"] + canvas["width"] / 2, canvas["y"] + canvas["height"] / 2 - 30)
    wait_for(page, "document.querySelector('#pointer').textContent.includes('µm')")

    page.locator("#slow").fill("30")
    wait_for(page, "document.querySelector('#regions').textContent.includes('30 %')")
    camera = state(page, "view")["camera"]
    page.click("#regions [data-region='0']")
    wait_for(page, f"JSON.stringify(window.bemescape.view.camera) !== {json.dumps(json.dumps(camera))}")
    shoot(page, "20_slow")
    page.select_option("#scale", "log")
    assert state(page, "scale")["log"] is True
    shoot(page, "21_log")
    page.select_option("#clip", "y")
    page.check("#inside")
    wait_for(page, "window.bemescape.section !== null")
    shoot(page, "22_cut")
    page.select_option("#colour", "exits")
    page.select_option("#clip", "")
    shoot(page, "23_exits")
    page.select_option("#colour", "time")
    page.select_option("#clip", "y")

    page.focus("#view")
    before = state(page, "view")["camera"]
    page.keyboard.press("ArrowLeft")
    wait_for(page, f"JSON.stringify(window.bemescape.view.camera) !== {json.dumps(json.dumps(before))}")
    link, view = page.evaluate("location.hash"), state(page, "view")
    other = browser.new_page()
    other.goto(f"{own.url}/{link}")
    wait_for(other, "window.bemescape.shown !== null")
    seen = state(other, "view")
    other.close()
    for key in ("run", "slow", "log", "clip", "inside", "colour"):
        assert seen[key] == view[key], key
    np.testing.assert_allclose(seen["camera"], view["camera"], rtol=1e-3, atol=1e-3)


def test_a_cut_takes_away_the_side_that_faces_the_reader(page, own, balls):
    """The pixel in the middle of the view shows the inside of the far wall or the section, after any turn."""
    open_run(page, own, balls[1][1])
    page.select_option("#clip", "y")
    for key in (None, *["ArrowRight"] * 26):  # past half a turn
        if key:
            page.focus("#view")
            page.keyboard.press(key)
    page.wait_for_timeout(300)
    here, there = (page.evaluate("p => window.bemescape.under(p)", place) for place in ([0, 0.9, 0], [0, -0.9, 0]))
    camera = state(page, "view")["camera"]
    near = 0.9 if camera[1] > 0 else -0.9
    # A ray to the near pole of the ball meets the wall that is kept, on the other side of the cut.
    assert camera[1] > 0
    assert here is None or here[1] * near < 1e-6
    assert there is None or there[1] * near < 1e-6
    assert here is not None or there is not None


@pytest.mark.parametrize("count", [2, 3, 4])
def test_runs_side_by_side_have_one_scale(page, own, balls, count):
    _, runs = balls
    page.goto(own.url)
    for run in runs[:count]:
        page.check(f"[data-run='{run['id']}'] input")
    page.click("#compare")
    wait_for(page, f"window.bemescape.panes === {count}")
    slowest = max(run["answer"]["slowest_time_s"] for run in runs[:count])
    assert state(page, "scale")["high"] == pytest.approx(slowest, rel=1e-5)
    assert page.locator("#compared tbody tr").count() == count
    shoot(page, f"30_compare_{count}")
    # The views turn together: one camera, which is in the address.
    page.focus("#view")
    page.keyboard.press("ArrowLeft")
    wait_for(page, "window.bemescape.view.camera !== null")
    assert "camera=" in page.evaluate("location.hash")
    page.select_option("#clip", "x")
    shoot(page, f"31_compare_{count}_cut")


def test_a_study_from_the_page(page, own, balls):
    shapes, _ = balls
    page.goto(f"{own.url}/#surface={shapes[0]}")
    page.click("#add-window")
    page.select_option("[data-window='0'] select", "labels")
    wait_for(page, "window.bemescape.windows.length === 1")
    page.fill("#diffusion", "1")
    page.select_option("#target", "other")
    page.fill("#target-text", "30 %")
    page.click("#study-form summary")
    for shape, group in zip(shapes, ("small", "large", "large"), strict=True):
        page.check(f"#member-{shape}")
        page.fill(f"[data-member='{shape}'] [data-label=group]", group)
    page.fill("#study-name", "three sizes")
    shoot(page, "40_study_form")
    page.click("#run-study")
    page.wait_for_selector("#study-table")
    shoot(page, "41_study_begins")
    page.wait_for_selector("#study-says")
    shoot(page, "42_study")
    record = state(page, "study")
    times = {row["surface"]: row["mean_time_s"] for row in record["rows"]}
    np.testing.assert_allclose(times[shapes[1]] / times[shapes[0]], 4.0, rtol=1e-6)  # the square of the size
    assert page.locator("#study-plot circle").count() == 3
    assert "no test is meaningful" in page.inner_text("#study-says")
    assert "study=" in page.evaluate("location.hash")
    page.reload()
    page.wait_for_selector("#study-says")
    page.click("#study-table tbody tr:first-child button")
    wait_for(page, "window.bemescape.shown !== null")


def test_pores_lids_and_neighbours_as_windows(page, own, tmp_path):
    """Random pores, a CSV of positions, a flat lid and a neighbouring surface, each with its true mask."""
    vertices, faces, _ = ball(3)
    with own.client() as client:
        surface = upload(client, ply_bytes(vertices, faces), name="cell.ply").json()["id"]
    page.goto(f"{own.url}/#surface={surface}")
    page.click("#add-window")
    page.select_option("[data-window='0'] select", "scatter")
    wait_for(page, "window.bemescape.windows.length === 10")
    shoot(page, "50_random_pores")

    places = tmp_path / "pores.csv"
    places.write_text("x,y,z\n1,0,0\n0,-1,0\n0,0,1\n")
    page.select_option("[data-window='0'] select", "points")
    page.set_input_files("[data-field=csv]", str(places))
    wait_for(page, "window.bemescape.windows.length === 3")

    page.select_option("[data-window='0'] select", "lid")
    for axis, value in zip("xyz", (0, 0, -0.8), strict=True):
        page.fill(f"[data-axis={axis}] >> nth=0", str(value))
    wait_for(page, "window.bemescape.windows.length === 1")
    # The lid z = −0.8 of the unit ball is a disc of radius 0.6.
    np.testing.assert_allclose(state(page, "windows")[0]["area_um2"], np.pi * 0.36, rtol=0.03)
    shoot(page, "51_lid")

    neighbour = tmp_path / "neighbour.ply"
    neighbour.write_bytes(ply_bytes(vertices + np.array([0, 0, 2.01]), faces))
    page.select_option("[data-window='0'] select", "near")
    page.set_input_files("[data-field=near]", str(neighbour))
    page.fill("[data-field=distance]", "100 nm")
    wait_for(page, "window.bemescape.windows.length === 1 && window.bemescape.windows[0].place_um[2] > 0.9")
    # Two unit balls a gap of g = 0.01 apart: places within d of the other have 1 + d ≥ √(ρ² + (1 + g + 1 − z)²).
    centre, reach = 2.01, 1.1
    z = (1 + centre**2 - reach**2) / (2 * centre)  # on the unit sphere, at the distance `reach` from the other centre
    np.testing.assert_allclose(state(page, "windows")[0]["area_um2"], 2 * np.pi * (1 - z), rtol=0.08)
    shoot(page, "52_near")


def test_a_shape_that_cannot_be_solved_shows_where_it_is_torn(page, own, tmp_path):
    vertices, faces, _ = ball(3)
    mesh = tmp_path / "torn.ply"
    mesh.write_bytes(ply_bytes(vertices, np.delete(faces, range(100, 330), axis=0)))
    page.goto(own.url)
    page.set_input_files("#file", str(mesh))
    page.select_option("#unit", "um")
    page.click("#upload")
    page.wait_for_selector("#verdict.bad")
    assert page.locator(".finding.error").count() == 1
    assert page.is_disabled("#openings h2 button")
    page.wait_for_timeout(300)
    shoot(page, "60_torn")
    page.click("#rebuild")
    wait_for(page, "!document.querySelector('#rebuild') || document.querySelector('#message.bad')?.textContent")
    shoot(page, "61_rebuilt")


def test_a_run_that_fails_and_one_that_is_cancelled_say_so(page, own, balls):
    shapes, _ = balls
    with own.client() as client:
        outside = order(shapes[0], name="outside", start={"points": {"far": [9.0, 9.0, 9.0]}})
        run = client.post("/api/runs", json=outside).json()
        wait_until_over(client, run["id"])
    page.goto(f"{own.url}/#run={run['id']}")
    wait_for(page, "document.querySelector('#progress-text.bad')?.textContent.includes('far')")
    shoot(page, "70_failed")
    page.goto(f"{own.url}/#run=0123456789abcdef")
    wait_for(page, "document.querySelector('#message.bad')?.textContent.includes('there is no run')")


def test_a_demo_by_keyboard_alone(page, own):
    page.goto(own.url)
    page.wait_for_selector("[data-demo=mitochondrion]")
    tab_to(page, "document.activeElement.dataset.demo === 'mitochondrion'")
    page.keyboard.press("Enter")
    wait_for(page, "window.bemescape.windows.length === 2")
    tab_to(page, "document.activeElement.id === 'run'")
    shoot(page, "80_keyboard")
    tab_to(page, "document.activeElement.id === 'view'")
    before = state(page, "view")["camera"]
    page.keyboard.press("+")
    wait_for(page, f"JSON.stringify(window.bemescape.view.camera) !== {json.dumps(json.dumps(before))}")


def tab_to(page, condition):
    for _ in range(80):
        page.keyboard.press("Tab")
        if page.evaluate(condition):
            return
    raise AssertionError(f"cannot be reached by Tab: {condition}")


#: WCAG 2.1, success criterion 1.4.3: 4.5 for text; 3 from 24 px, or 18.66 px bold. Relative luminance as defined there.
CONTRASTS = """
() => {
  const luminance = ([r, g, b]) => {
    const linear = (v) => (v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4);
    const [R, G, B] = [r, g, b].map((v) => linear(v / 255));
    return 0.2126 * R + 0.7152 * G + 0.0722 * B;
  };
  const numbers = (colour) => colour.match(/[\\d.]+/g).map(Number);
  const behind = (element) => {
    for (let e = element; e; e = e.parentElement) {
      const colour = numbers(getComputedStyle(e).backgroundColor);
      if ((colour[3] ?? 1) > 0.5) return colour;
    }
    return [255, 255, 255];
  };
  const found = [];
  for (const element of document.querySelectorAll("body *")) {
    const text = [...element.childNodes].filter((node) => node.nodeType === 3).map((node) => node.data.trim()).join("");
    if (!text || element.disabled || !element.checkVisibility() || element.closest("svg, noscript, .locked")) continue;
    const style = getComputedStyle(element);
    const [a, b] = [luminance(numbers(style.color)), luminance(behind(element))].sort((x, y) => y - x);
    const size = parseFloat(style.fontSize);
    const large = size >= 24 || (size >= 18.66 && Number(style.fontWeight) >= 700);
    found.push([(a + 0.05) / (b + 0.05) / (large ? 3 : 4.5), text.slice(0, 40)]);
  }
  return found;
}
"""


def test_all_text_has_the_contrast_of_wcag_and_every_control_a_name(page, own, balls):
    _, runs = balls
    for link in ("", f"#run={runs[0]['id']}", f"#surface={runs[0]['surface']}"):
        page.goto("about:blank")
        page.goto(f"{own.url}/{link}")
        page.wait_for_selector("#shelf ul")
        if "run" in link:
            wait_for(page, "window.bemescape.shown !== null")
        found = page.evaluate(CONTRASTS)
        assert len(found) > 10
        assert [entry for entry in found if entry[0] < 1.0] == []
        nameless = page.evaluate(
            "[...document.querySelectorAll('button, input, select, textarea, a')].filter((e) => e.checkVisibility() && "
            "!e.textContent.trim() && !e.getAttribute('aria-label') && !e.labels?.length).map((e) => e.outerHTML)"
        )
        assert nameless == []


def test_without_webgl_the_service_draws_the_pictures(playwright, own, balls):
    _, runs = balls
    with launched(playwright, "--disable-3d-apis") as browser, watched_page(browser, own) as page:
        page.goto(own.url)
        page.click("[data-demo=bouton]")
        wait_for(page, "window.bemescape.drawn >= 2 && window.bemescape.windows.length === 2")
        shoot(page, "90_flat")
        with own.client() as client:
            page.goto(f"{own.url}/#run={runs[0]['id']}")
            ends = client.get(f"/api/runs/{runs[0]['id']}").json()
            assert ends["pictures"] in ("waiting", "running", "done")
        page.wait_for_selector("#flat-views select")
        wait_for(page, "window.bemescape.shown !== null && window.bemescape.drawn >= 3")
        shoot(page, "91_flat_answer")


def test_the_preview_follows_the_pointer_before_the_click(page, own, balls):
    """While a window is being placed, the patch under the pointer is drawn by the page alone: no request."""
    shapes, _ = balls
    page.goto(f"{own.url}/#surface={shapes[0]}")
    page.click("#add-window")
    asked = []
    page.on("request", lambda request: asked.append(request.url))
    drawn = state(page, "drawn")
    x, y = page.evaluate("place => window.bemescape.onScreen(place)", [0.55, -0.75, 0.45])
    page.mouse.move(x + 30, y)
    page.mouse.move(x, y)
    wait_for(page, f"window.bemescape.drawn > {drawn}")
    shoot(page, "15_preview")
    assert asked == []
    click_wall(page, [0.55, -0.75, 0.45])
    wait_for(page, "window.bemescape.windows.length === 1")


@pytest.fixture
def fine_ball():
    return ply_bytes(*ball(5))  # 20 480 faces


def test_the_first_picture_of_a_large_surface_is_cheap(page, own, fine_ball):
    """The browser's own time from the address to the picture; a generous limit, since a loaded machine is slower."""
    with own.client() as client:
        surface = upload(client, fine_ball, name="large.ply").json()
        assert surface["faces"] == 20_480
    page.goto(f"{own.url}/#surface={surface['id']}")
    wait_for(page, "window.bemescape.firstPicture !== null")
    tell({"first_picture_ms": state(page, "firstPicture"), "faces": surface["faces"]})


def test_a_copy_of_an_order_can_be_changed_and_run_again(page, own, balls):
    """The openings of an answer can be opened again, changed and computed as another run."""
    _, runs = balls
    body = copy.deepcopy(runs[0]["order"])
    open_run(page, own, runs[0])
    page.click("#openings h2 button")
    assert page.locator("[data-window]").count() == len(body["window"])
    page.fill("#run-name", "again")
    page.fill("#diffusion", "2")
    page.click("#run")
    wait_for(page, f"window.bemescape.view.run !== '{runs[0]['id']}'")
    page.wait_for_selector("#mean-time")
    wait_for(page, "window.bemescape.shown === window.bemescape.view.run")
    # Half the time at twice the diffusion coefficient.
    with own.client() as client:
        again = client.get(f"/api/runs/{state(page, 'view')['run']}").json()
    ratio = again["answer"]["mean_time_s"] / runs[0]["answer"]["mean_time_s"]
    np.testing.assert_allclose(ratio, 0.5, rtol=1e-9)
