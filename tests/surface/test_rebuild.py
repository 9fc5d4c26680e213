"""The last resort: closed surfaces around damaged ones, against closed forms of the volume."""

from __future__ import annotations

import re

import numpy as np
import pytest

from bemescape.errors import SettingsError, SurfaceError
from bemescape.progress import silent
from bemescape.surface import Surface, check_surface, heal_surface, read_surface
from bemescape.surface.rebuild import rebuilt
from bemescape.surface.working import Working


def test_overlapping_cubes_become_their_union(shapes):
    # 1 + 1 - 0.5 * 0.6 * 0.7; edges and corners are rounded within a voxel.
    mesh = shapes.join(shapes.cube(), shapes.cube(1.0, (0.5, 0.4, 0.3)))
    surface = heal_surface(Surface(*mesh), "rebuild", voxel="40 nm")
    assert check_surface(surface.vertices, surface.faces).ok
    assert surface.healing.after.part_count == 1
    assert surface.volume == pytest.approx(2.0 - 0.5 * 0.6 * 0.7, rel=0.01)


def test_a_ball_keeps_its_volume_and_reports_its_distance(shapes):
    ball = Surface(*shapes.ball(1.0))
    surface = heal_surface(ball, "rebuild", voxel="50 nm")
    # Marching cubes on exact distances: second order, (h/R)²; vertices are kept 0.05 voxels off the nodes.
    assert surface.volume == pytest.approx(ball.volume, rel=3e-3)
    change = next(change for change in surface.healing.changes if change.kind == "rebuilt surface")
    assert change.volume_change_um3 == pytest.approx(surface.volume - ball.volume, abs=1e-12)
    assert "voxels of 50 nm" in change.detail
    mean, high, largest = (float(x) for x in re.findall(r"(?:mean|below|largest) ([\d.]+) nm", change.detail))
    assert 0.0 < mean < high < largest < 50.0
    radius = np.linalg.norm(surface.vertices, axis=1)
    assert np.abs(radius - 1.0).max() < 0.01


def test_halving_the_voxels_brings_the_volume_closer(shapes):
    ball = Surface(*shapes.ball(1.0))
    errors = [abs(heal_surface(ball, "rebuild", voxel=f"{size} nm").volume - ball.volume) for size in (160, 80, 40)]
    assert errors[2] < 0.5 * errors[1] < 0.25 * errors[0] * 1.5


def test_many_small_holes_do_not_let_the_outside_in(shapes):
    vertices, faces = shapes.ball(1.0)
    keep = np.random.default_rng(5).random(len(faces)) > 0.08
    # The step alone: healing would close most of these holes before.
    torn = Working.of(Surface(vertices, faces[keep]))
    mesh = rebuilt(torn, "torn", 0.04, silent).mesh
    surface = Surface(mesh.vertices, mesh.faces)
    report = check_surface(surface.vertices, surface.faces)
    assert report.ok
    assert report.part_count == 1
    assert surface.volume == pytest.approx(Surface(vertices, faces).volume, rel=0.01)


def test_an_obstacle_stays_hollow(shapes):
    surface = heal_surface(Surface(*shapes.join(shapes.ball(1.0), shapes.ball(0.5))), "rebuild", voxel="40 nm")
    expected = Surface(*shapes.ball(1.0)).volume - Surface(*shapes.ball(0.5)).volume
    assert surface.volume == pytest.approx(expected, rel=0.01)
    assert surface.healing.after.part_count == 2


def test_labels_go_to_the_nearest_faces(shapes):
    vertices, faces = shapes.ball(1.0)
    label = (vertices[faces].mean(axis=1)[:, 2] > 0.0).astype(int)
    surface = heal_surface(Surface(vertices, faces, face_data={"label": label}), "rebuild", voxel="60 nm")
    height = surface.vertices[surface.faces].mean(axis=1)[:, 2]
    clear = np.abs(height) > 0.1
    np.testing.assert_array_equal(surface.face_data["label"][clear], (height > 0.0)[clear])


def test_a_large_opening_is_not_closed_by_guessing(shapes):
    vertices, faces = shapes.ball(1.0)
    bowl = faces[vertices[faces].mean(axis=1)[:, 2] < 0.2]
    with pytest.raises(SurfaceError, match=r"holes are too large|no voxel|not a closed surface"):
        heal_surface(Surface(vertices, bowl), "rebuild", voxel="40 nm")
    with pytest.raises(SurfaceError):
        heal_surface(Surface(*shapes.mobius()), "rebuild", voxel="40 nm")


def test_voxels_must_fit_the_mesh(shapes, write):
    path = write("a.ply", shapes.ply_bytes(*shapes.ball(1.0)))
    with pytest.raises(SettingsError, match="take at least"):
        read_surface(path, unit="um", heal="rebuild", voxel="0.1 nm")
    with pytest.raises(SettingsError, match="too coarse"):
        read_surface(path, unit="um", heal="rebuild", voxel="3 um")


def test_a_voxel_size_is_chosen_from_the_mesh(shapes):
    surface = heal_surface(Surface(*shapes.ball(1.0)), "rebuild")
    assert surface.healing.mode == "rebuild"
    assert 1000 < len(surface.faces) < 100_000
