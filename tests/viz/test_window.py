import os
import subprocess
import sys

import numpy as np
import pytest

from bemescape.errors import SettingsError
from bemescape.viz import open_window
from bemescape.viz.shapes import standard_view
from bemescape.viz.window import DesktopWindow

SIZE = (600, 450)


@pytest.fixture
def window(spine):
    window = DesktopWindow(spine, off_screen=True, size=SIZE)
    window.plotter.render()
    yield window
    window.plotter.close()


def photo(window):
    window.plotter.render()
    return window.plotter.screenshot(return_img=True)[..., :3].astype(float) / 255.0


def pixel(window, place):
    x, y = window.overlay.pixel(np.asarray(place, dtype=float))
    return round(float(x)), round(float(y))


def test_without_a_display_the_window_is_refused_with_the_remedy(spine, monkeypatch):
    monkeypatch.delenv("DISPLAY", raising=False)
    monkeypatch.setattr(sys, "platform", "linux")
    with pytest.raises(SettingsError, match=r"no display.*--png FILE"):
        open_window(spine)


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="only X has a display that can be unreachable")
def test_a_display_that_does_not_answer_is_refused_too_not_drawn_unseen(tmp_path):
    code = (
        "import sys\n"
        f"sys.path.insert(0, {os.path.dirname(__file__)!r})\n"
        "from conftest import painted\n"
        "from bemescape.errors import SettingsError\n"
        "from bemescape.viz import open_window\n"
        "try:\n"
        "    open_window(painted())\n"
        "except SettingsError as error:\n"
        "    print(error)\n"
    )
    environment = {**os.environ, "DISPLAY": ":987"}
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, env=environment, timeout=60, check=True
    )
    assert "--png FILE" in done.stdout
    assert done.stderr == ""


def test_a_click_tells_the_time_at_the_place_nearest_to_the_eye(window, spine):
    towards = standard_view(spine, "front").towards
    # The panel of the head that faces the eye most is in front; the far wall is behind the same pixel.
    panel = int(np.argmax(spine.panel_centroids @ towards))
    x, y = pixel(window, spine.panel_centroids[panel])
    text = window.click(x, y)
    place = np.array([float(number) for number in text[text.index("(") + 1 : text.index(")")].split(",")])
    assert (place - spine.panel_centroids[panel]) @ towards == pytest.approx(0.0, abs=0.02)
    shown = float(text.split("mean escape time ")[1].split(" ms")[0]) / 1e3
    # Panel values, averaged to corners: within the change of the formula over one panel.
    assert shown == pytest.approx(float(spine.formula(place[None])[0]), rel=0.03)
    assert "in a straight line from" in text
    assert window.overlay.note == text


def test_the_straight_distance_to_a_window_is_exact(window, spine):
    rim = spine.panel_centroids[spine.panel_window == 0].mean(axis=0)
    far = int(np.argmax(np.linalg.norm(spine.panel_centroids - rim, axis=1)))
    text = window.describe(far, spine.panel_centroids[far])
    corners = spine.vertices[spine.faces[spine.panel_window >= 0]].reshape(-1, 3)
    least = np.linalg.norm(corners - spine.panel_centroids[far], axis=1).min()
    number, unit = text.split(", ")[-1].split(" ")[:2]
    stated = float(number) * {"nm": 1e-3, "µm": 1.0}[unit]
    # Never longer than to a corner, and shorter by less than one edge (0.05 µm).
    assert least - 0.05 < stated < least + 0.005


def test_a_click_on_a_window_names_it_and_one_beside_the_shape_says_nothing(window, spine):
    window.look("side")
    middle = spine.panel_centroids[spine.panel_window == 0].mean(axis=0)
    assert window.click(*pixel(window, middle)).startswith("window neck, ")
    assert window.click(2, SIZE[1] // 2) is None


def test_logarithmic_colours_reach_the_wall_and_go_back(window):
    first = photo(window)
    window.toggle_scale()
    second = photo(window)
    assert np.abs(first - second)[:, : int(0.8 * SIZE[0])].mean() > 0.01
    window.toggle_scale()
    assert np.array_equal(photo(window), first)


def test_slow_regions_and_their_labels_come_and_go(window):
    def red(image):
        return ((image[..., 0] > 0.55) & (image[..., 1] < 0.3) & (image[..., 2] < 0.35)).sum()

    shown = red(photo(window))
    window.toggle_slow()
    assert red(photo(window)) == 0
    window.toggle_slow()
    assert red(photo(window)) == shown > 200


def test_exit_density_shows_on_the_windows(window):
    window.look("side")
    first = photo(window)
    window.toggle_density()
    changed = np.abs(photo(window) - first).max(axis=-1) > 0.2
    assert changed.sum() > 500
    assert "exits per µm²" in window.overlay.note
    window.toggle_density()
    assert np.array_equal(photo(window), first)


def test_the_cut_opens_the_shape_and_a_click_reads_the_time_inside(window, spine):
    first = photo(window)
    window.toggle_cut()
    section = window.scene.actors["section"][0].mapper.dataset
    place = section.points[np.argmin(np.linalg.norm(section.points, axis=1))]
    text = window.click(*pixel(window, place))
    assert text.startswith("inside, ")
    shown = float(text.split("mean escape time ")[1].split(" ms")[0]) / 1e3
    assert shown == pytest.approx(float(spine.formula(place[None])[0]), rel=0.01)
    window.toggle_cut()
    assert "section" not in window.scene.actors
    assert window.click(*pixel(window, place)).startswith("wall, ")
    window._unmark()
    window.overlay.set_note(window._first_note)
    assert np.abs(photo(window) - first).mean() < 1e-3


def test_keys_reach_their_actions_and_the_renderers_own_keys_are_off(window):
    interactor = window.plotter.iren.interactor
    before = photo(window)
    for key in "ss":
        interactor.SetEventInformation(300, 225, 0, 0, key, 0, key)
        interactor.KeyPressEvent()
        interactor.CharEvent()
    # "s" twice: slow regions off and on again; the renderer's "s" and "w" would change the surface's style.
    assert np.array_equal(photo(window), before)
    interactor.SetEventInformation(300, 225, 0, 0, "l", 0, "l")
    interactor.KeyPressEvent()
    assert not np.array_equal(photo(window), before)


def test_a_click_with_the_mouse_marks_a_place_but_a_drag_does_not(window):
    photo(window)  # the interactor listens from the first picture on
    interactor = window.plotter.iren.interactor
    note = window.overlay.note
    interactor.SetEventInformation(300, 225, 0, 0, " ", 0, "")
    interactor.LeftButtonPressEvent()
    interactor.SetEventInformation(330, 240, 0, 0, " ", 0, "")
    interactor.MouseMoveEvent()
    interactor.LeftButtonReleaseEvent()
    assert window.overlay.note == note
    interactor.LeftButtonPressEvent()
    interactor.LeftButtonReleaseEvent()
    assert window.overlay.note.startswith("wall, ")


def test_the_scale_bar_follows_the_zoom(window):
    before = window.overlay.ruler_um
    window.plotter.camera.Zoom(10.0)
    assert window.overlay.ruler_um == pytest.approx(before / 10.0, rel=1e-9)


def test_a_click_on_an_outline_reads_the_wall_under_it(window):
    towards = standard_view(window.scene.result, "front").towards
    middles = window.scene.slow_outline.mean(axis=1)
    in_sight = [place for place in middles if not window.scene.hidden(place, towards)]
    for place in in_sight[:: max(1, len(in_sight) // 8)]:
        assert window.click(*pixel(window, place)).startswith("wall, ")
