"""Which panels are refined next."""

import numpy as np
import pytest

from bemescape.bem.indicator import coarse_panels


def sheet(columns=8, rows=80, length=1.0, width=0.1):
    """Flat rectangles, `length` along x and `width` along y, each cut in two."""
    x, y = np.meshgrid(length * np.arange(columns + 1.0), width * np.arange(rows + 1.0))
    vertices = np.column_stack([x.ravel(), y.ravel(), np.zeros(x.size)])
    corner = (np.arange(rows)[:, None] * (columns + 1) + np.arange(columns)).ravel()
    above = corner + columns + 1
    faces = [np.column_stack([corner, corner + 1, above + 1]), np.column_stack([corner, above + 1, above])]
    return vertices, np.concatenate(faces)


@pytest.mark.parametrize("axis", [0, 1])
def test_a_sliver_is_coarse_if_u_changes_along_it_and_not_if_it_changes_across(axis):
    """Two sheets of slivers of equal area, one turned by 90°, under one linear u.

    By hand: the error of a constant on a panel goes as (extent along the gradient) × area × |∇u|². Extents are
    10 : 1, so that ten elevenths of it lie on one sheet, and the 0.7 that is asked for is found there alone.
    """
    vertices, faces = sheet()
    turned = vertices[:, [1, 0, 2]] * [1.0, -1.0, 1.0] + [50.0, 0.0, 0.0]
    both, all_faces = np.concatenate([vertices, turned]), np.concatenate([faces, faces + len(vertices)])
    u = both[all_faces].mean(axis=1)[:, axis]
    marked = coarse_panels(both, all_faces, u, np.zeros(len(all_faces), bool))
    lying, standing = marked[: len(faces)].sum(), marked[len(faces) :].sum()
    along, across = (lying, standing) if axis == 0 else (standing, lying)
    # 0.7 of 11/10 of the sheet's own error, and its outermost columns have half a gradient only.
    assert 0.6 * len(faces) < along < 0.95 * len(faces)
    assert across == 0


def test_windows_and_places_of_constant_u_are_left_alone():
    vertices, faces = sheet(columns=4, rows=4)
    windows = np.arange(len(faces)) < 16
    u = vertices[faces].mean(axis=1)[:, 0]
    marked = coarse_panels(vertices, faces, u, windows)
    assert marked.any()
    assert not marked[windows].any()
    assert not coarse_panels(vertices, faces, np.ones(len(faces)), windows).any()
