import dataclasses
import os
import subprocess
import sys

import numpy as np
import pytest
import trimesh
from matplotlib import colormaps
from matplotlib.colors import rgb_to_hsv
from matplotlib.image import imread

from bemescape.errors import SettingsError
from bemescape.results.result import WindowResult
from bemescape.viz import cutaway_scene, render_png, save_pictures, wall_scene, windows_scene
from bemescape.viz.overlay import safe_text
from bemescape.viz.parts import Scene
from bemescape.viz.shapes import standard_view

SIZE = (600, 450)
RENDERED = ("view_front.png", "view_side.png", "view_top.png", "cutaway.png", "windows.png")
DRAWN = ("spread.png", "convergence.png")


def photo(plotter):
    image = plotter.screenshot(return_img=True)
    plotter.close()
    return image[..., :3].astype(float) / 255.0


def shape_part(image):
    """Without title, colour bar and scale bar."""
    height, width = image.shape[:2]
    return image[int(0.12 * height) : int(0.87 * height), : int(0.82 * width)]


@pytest.fixture(scope="module")
def pictures(spine, tmp_path_factory):
    folder = tmp_path_factory.mktemp("pictures")
    return {path.name: path for path in save_pictures(spine, folder, size=SIZE)}


def test_every_picture_is_written(pictures):
    assert set(pictures) == {*RENDERED, *DRAWN}


@pytest.mark.parametrize("name", RENDERED)
def test_a_rendered_picture_has_the_wanted_size_and_shows_something_on_white(pictures, name):
    image = imread(pictures[name])
    assert image.shape[:2] == (SIZE[1], SIZE[0])
    assert image[5, -5, :3] == pytest.approx(1.0)
    inked = (shape_part(image)[..., :3] < 0.98).any(axis=-1).mean()
    assert 0.05 < inked < 0.9


@pytest.mark.parametrize("name", DRAWN)
def test_a_figure_is_not_blank(pictures, name):
    assert (imread(pictures[name])[..., :3] < 0.5).any(axis=-1).mean() > 0.001


def test_the_wall_has_the_hues_of_the_map_and_windows_one_of_their_own(pictures):
    colours = shape_part(imread(pictures["view_side.png"])).reshape(-1, imread(pictures["view_side.png"]).shape[-1])
    hue, saturation, value = rgb_to_hsv(colours[:, :3]).T
    vivid = hue[(saturation > 0.3) & (value > 0.2)] * 360.0
    # The map runs from blue (215°) to yellow (52°) through grey; the windows' light blue is at 193°.
    assert ((vivid > 40.0) & (vivid < 62.0)).mean() > 0.3
    assert ((vivid > 188.0) & (vivid < 200.0)).sum() > 500
    assert ((vivid > 75.0) & (vivid < 170.0)).mean() < 0.01


def test_a_section_shows_exactly_the_colour_of_its_time(spine):
    scene = Scene(spine)
    plotter = cutaway_scene(spine, size=SIZE, scene=scene)
    place = np.array([0.0, 0.0, 0.0])
    section = scene.actors["section"][0].mapper.dataset
    place = section.points[np.argmin(np.linalg.norm(section.points - place, axis=1))]
    x, y = scene.overlay.pixel(place)
    image = photo(plotter)
    found = image[SIZE[1] - 1 - round(y), round(x)]
    high = spine.panel_time_s.max()
    expected = colormaps["cividis"](float(spine.formula(place[None])[0]) / high)[:3]
    # One step of the 256 colours, and half a pixel.
    assert found == pytest.approx(np.array(expected), abs=0.02)


def test_the_scale_bar_measures_the_diameter_of_a_ball(make_ball):
    ball = make_ball(subdivisions=4)
    scene = Scene(ball)
    plotter = wall_scene(ball, "front", slow=False, size=SIZE, scene=scene)
    plotter.render()
    per_um = scene.overlay.ruler_pixels / scene.overlay.ruler_um
    image = photo(plotter)
    inked = (shape_part(image) < 0.97).any(axis=-1)
    height = np.flatnonzero(inked.any(axis=1))
    # Two pixels for the smoothed silhouette; the icosphere itself is round to 0.1 %.
    assert (height[-1] - height[0] + 1) == pytest.approx(2.0 * per_um, abs=3.0)


def test_the_drawn_scale_bar_is_as_long_as_it_says(make_ball):
    scene = Scene(make_ball())
    plotter = wall_scene(scene.result, "front", size=SIZE, scene=scene)
    plotter.render()
    wanted = scene.overlay.ruler_pixels
    image = photo(plotter)
    row = image[SIZE[1] - 1 - round(0.045 * SIZE[1]) - 1 : SIZE[1] - round(0.045 * SIZE[1]) + 1]
    dark = np.flatnonzero((row[:, : SIZE[0] // 2] < 0.5).all(axis=-1).any(axis=0))
    assert dark[-1] - dark[0] == pytest.approx(wanted, abs=3.0)


def test_a_turned_shape_gives_the_same_picture(spine):
    turn = trimesh.transformations.rotation_matrix(0.7, [1.0, 0.2, 0.5])[:3, :3]
    turned = dataclasses.replace(spine, vertices=spine.vertices @ turn.T)
    # Labels lean on which window faces the eye, to rounding; slow regions are found anew by rounding too.
    first = shape_part(photo(wall_scene(spine, "side", slow=False, size=SIZE)))
    second = shape_part(photo(wall_scene(turned, "side", slow=False, size=SIZE)))
    assert np.abs(first - second).mean() < 0.004


def test_the_same_result_gives_the_same_picture_twice(spine):
    first = photo(wall_scene(spine, "top", size=SIZE))
    assert np.array_equal(first, photo(wall_scene(spine, "top", size=SIZE)))


def test_slow_regions_are_outlined_in_red(spine):
    def red(image):
        return ((image[..., 0] > 0.55) & (image[..., 1] < 0.3) & (image[..., 2] < 0.35)).sum()

    assert red(photo(wall_scene(spine, "front", slow=False, size=SIZE))) == 0
    assert red(photo(wall_scene(spine, "front", size=SIZE))) > 200


def test_a_window_behind_the_shape_gets_no_label(make_ball):
    ball = make_ball()
    scene = Scene(ball)
    assert scene.hidden(np.array([0.0, 0.0, 1.0]), np.array([0.0, 0.0, -1.0]))
    assert not scene.hidden(np.array([0.0, 0.0, 1.0]), np.array([0.0, 0.0, 1.0]))


def test_a_shape_without_wall_is_drawn(make_ball, tmp_path):
    everywhere = make_ball(subdivisions=2, cap=4.0)
    assert (everywhere.panel_window == 0).all()
    for path in save_pictures(everywhere, tmp_path, size=(400, 300)):
        assert path.stat().st_size > 1000


def test_many_windows_are_drawn_without_labels_and_the_six_largest_in_close_up(make_ball):
    ball = make_ball(subdivisions=3)
    window = np.full(len(ball.faces), -1)
    window[:: len(ball.faces) // 40] = np.arange(len(window[:: len(ball.faces) // 40]))
    names = tuple(WindowResult(f"pore {k}", 0.01, 1.0 / 41.0) for k in range(window.max() + 1))
    porous = dataclasses.replace(ball, panel_window=window, windows=names)
    plotter = windows_scene(porous, size=SIZE)
    assert len(plotter.renderers) == 6
    assert (photo(plotter) < 0.9).any()
    assert (photo(wall_scene(porous, size=SIZE)) < 0.9).any()


def test_close_ups_look_straight_at_their_window(spine):
    plotter = windows_scene(spine, size=SIZE)
    for number, renderer in enumerate(plotter.renderers):
        normals = spine.panel_normals[spine.panel_window == number]
        sight = np.array(renderer.camera.GetDirectionOfProjection())
        assert (normals @ -sight).mean() > 0.9
    plotter.close()


@pytest.mark.parametrize("text", ["$\\alpha$", "a|b", "x" * 200, "line\nbreak\x07", "50 % $ rest", "neck µ²"])
def test_any_name_is_drawn_as_one_plain_line(text, make_spine):
    assert "\n" not in safe_text(text)
    assert len(safe_text(text)) <= 49
    image = photo(wall_scene(make_spine(name=text), slow=False, size=(400, 300)))
    title = image[:14, 5:200]
    assert (title < 0.5).any()


def test_dollar_signs_are_not_taken_for_a_formula():
    # The renderer draws "\\$" as a plain dollar sign, and what stands between two bare ones as mathematics.
    assert safe_text("$x^2$") == "\\$x^2\\$"


def test_one_picture_is_rendered_with_and_without_cut(spine, tmp_path):
    whole = render_png(spine, tmp_path / "a.png", view="top", size=SIZE)
    cut = render_png(spine, tmp_path / "b.PNG", cut=True, size=SIZE)
    assert imread(whole).shape[:2] == imread(cut, format="png").shape[:2] == (450, 600)
    assert np.abs(imread(whole) - imread(cut, format="png")).mean() > 0.01


def test_refusals_say_what_to_do(spine, tmp_path):
    with pytest.raises(SettingsError, match=r"'below'.*front, side, top"):
        render_png(spine, tmp_path / "a.png", view="below")
    with pytest.raises(SettingsError, match=r"'a.gif' does not end in '.png'"):
        render_png(spine, tmp_path / "a.gif")
    with pytest.raises(SettingsError, match=r"nowhere.* does not exist"):
        render_png(spine, tmp_path / "nowhere" / "a.png")
    with pytest.raises(SettingsError, match=r"50 x 90000 pixels.*200 and 8000"):
        render_png(spine, tmp_path / "a.png", size=(50, 90000))
    (tmp_path / "taken").write_text("a file")
    with pytest.raises(SettingsError, match="taken cannot be made"):
        save_pictures(spine, tmp_path / "taken", size=SIZE)


def test_pictures_need_no_display_and_say_nothing_on_stderr():
    code = (
        "import pyvista as pv\n"
        "from bemescape.viz.parts import new_plotter\n"
        "plotter = new_plotter(off_screen=True, size=(300, 200))\n"
        "plotter.add_mesh(pv.Sphere())\n"
        "image = plotter.screenshot(return_img=True)\n"
        "print((image < 200).mean())\n"
    )
    environment = {key: value for key, value in os.environ.items() if "DISPLAY" not in key}
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, env=environment, timeout=60, check=True
    )
    assert float(done.stdout) > 0.01
    assert done.stderr == ""


def test_importing_the_package_loads_no_drawing_library():
    code = "import sys, bemescape.viz; print(*sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, check=True)
    loaded = set(done.stdout.split())
    assert "bemescape.viz" in loaded
    assert not loaded & {"pyvista", "matplotlib", "vtkmodules"}


def test_the_view_of_a_picture_is_the_standard_view(spine):
    plotter = wall_scene(spine, "top", size=SIZE)
    sight = np.array(plotter.camera.GetDirectionOfProjection())
    assert -sight == pytest.approx(standard_view(spine, "top").towards, abs=1e-9)
    plotter.close()
