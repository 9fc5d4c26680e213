"""Compact pores in pictures: discs in the colour of their share, where panels would be."""

import json
import math

import numpy as np
import pytest

import shapes
from bemescape import EscapeResult, Window, solve_escape
from bemescape.viz import wall_scene, windows_scene
from bemescape.viz.pores import pore_discs, share_scale
from bemescape.viz.scales import map_colours

AXES = np.concatenate([np.eye(3), -np.eye(3)])


@pytest.fixture(scope="module")
def result() -> EscapeResult:
    """Six pores on an ovoid: those at its poles take less than those around its waist."""
    surface = shapes.ball(2)
    surface = type(surface)(surface.vertices * [1.0, 1.0, 1.6], surface.faces)
    window = Window.points("pore", positions=AXES * [1, 1, 1.6], radius=0.05, farthest=0.2, compact=True)
    return solve_escape(surface, [window], 1.0, target=0.1)


def test_each_pore_is_a_disc_in_the_colour_of_its_share(result):
    mesh = pore_discs(result, 1.0, shares=True)
    shares = np.array(list(result.shares.values()))
    assert mesh.n_cells == 6
    np.testing.assert_array_equal(mesh.cell_data["colour"], map_colours(share_scale(result), shares))
    np.testing.assert_array_equal(mesh.cell_data["window"], result.pores.window)
    # A regular polygon of 20 corners has 0.9836 of its circle's area: 10/π sin(π/10).
    area = 10.0 * math.sin(math.pi / 10.0) * result.pores.radius_um**2
    np.testing.assert_allclose(mesh.compute_cell_sizes()["Area"], area, rtol=1e-5)
    np.testing.assert_allclose(mesh.cell_centers().points, result.pores.centre_um, atol=2e-3)


def test_small_pores_are_drawn_large_enough_to_be_seen(result):
    sizes = pore_discs(result, 100.0, shares=False).compute_cell_sizes()["Area"]
    np.testing.assert_allclose(sizes, 10.0 * math.sin(math.pi / 10.0) * 0.4**2, rtol=1e-5)


def test_pictures_show_the_pores(result):
    plotter = windows_scene(result, size=(500, 400))
    image = plotter.screenshot(return_img=True)[..., :3].astype(int)
    plotter.close()
    # Unlit discs: the very colours of the shares.
    for colour in np.unique(pore_discs(result, 1.0, shares=True).cell_data["colour"], axis=0)[-1:]:
        assert (np.abs(image - colour).max(axis=-1) <= 2).sum() > 20
    plotter = wall_scene(result, size=(500, 400))
    image = plotter.screenshot(return_img=True)[..., :3].astype(int)
    plotter.close()
    assert (np.abs(image - [0x35, 0xD0, 0xFF]).max(axis=-1) <= 2).sum() > 20


def test_the_report_folder_is_complete(result, tmp_path):
    result.save(tmp_path)
    assert "compact pore" in (tmp_path / "report.html").read_text(encoding="utf-8")
    windows = json.loads((tmp_path / "summary.json").read_text())["windows"]
    assert all(window["compact"] and window["share_error"] > 0.0 for window in windows)
