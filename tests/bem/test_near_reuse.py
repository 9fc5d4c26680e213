"""A near field made from an earlier one is the one worked out anew."""

import numpy as np
import pytest

from bemescape import Window
from bemescape.bem.near import build_near_field
from bemescape.bem.near_reuse import EarlierNearField, near_field_from
from bemescape.bem.panels import make_panels
from bemescape.windows.grade import Fineness, graded, place_windows
from shapes import ball, on_ball

SURFACE = ball(3)


def near_field(direction, radius):
    window = Window.disc("pore", centre=on_ball(SURFACE, direction), radius=radius)
    mesh = graded(place_windows(SURFACE, [window]), Fineness(12.0, 3, 500.0))
    panels = make_panels(mesh.vertices[mesh.faces])
    is_window = mesh.window_of[panels.order] >= 0
    return EarlierNearField(panels, is_window, build_near_field(panels, is_window))


@pytest.fixture(scope="module")
def first():
    return near_field([0.3, 0.2, 0.9], 0.15)


@pytest.mark.parametrize(
    ("direction", "radius"), [([0.3, 0.2, 0.9], 0.1), ([0.3, -0.8, 0.2], 0.15)], ids=["radius", "place"]
)
def test_taken_over_rows_are_those_worked_out_anew(first, direction, radius):
    second = near_field(direction, radius)
    near, kept = near_field_from(second.panels, second.is_window, first)
    assert 0.3 < kept.mean() < 0.95
    for part in ("first", "column", "double", "window_first", "window_column", "single"):
        np.testing.assert_array_equal(getattr(near, part), getattr(second.near, part), err_msg=part)
    # A sum over the row, in the order of the panels' numbers, which may differ: rounding.
    scale = np.abs(second.near.volume).max()
    np.testing.assert_allclose(near.volume, second.near.volume, rtol=0.0, atol=1e-13 * scale)


def test_rows_beside_a_panel_that_becomes_window_are_not_taken_over(first):
    """The panels are the same, but V needs columns that were not there."""
    is_window = first.is_window.copy()
    opened = int(np.flatnonzero(~is_window)[0])
    is_window[opened] = True
    near, kept = near_field_from(first.panels, is_window, first)
    anew = build_near_field(first.panels, is_window)
    assert not kept[opened]
    assert kept.any()
    np.testing.assert_array_equal(near.window_column, anew.window_column)
    np.testing.assert_array_equal(near.single, anew.single)


def test_the_same_mesh_is_taken_over_whole(first):
    near, kept = near_field_from(first.panels, first.is_window, first)
    assert kept.all()
    np.testing.assert_array_equal(near.double, first.near.double)
