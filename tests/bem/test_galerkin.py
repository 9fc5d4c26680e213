"""The Galerkin second opinion against closed forms; bempp-cl compiles for a minute, so all tests but one are slow."""

import numpy as np
import pytest

import exact
import shapes
from bemescape.bem.galerkin import GalerkinMatrices, galerkin_matrices, solve_mixed

slow = pytest.mark.slow


def labelled(body, label=1):
    return np.where(body.face_data["label"] == label, 0, -1)


def solved(body, panel_window, *, diffusion=1.0, permeability=np.inf, matrices=None):
    return solve_mixed(
        body.vertices,
        body.faces,
        panel_window,
        diffusion,
        matrices,
        permeability_um_s=np.array([permeability]),
    )


@pytest.fixture(scope="module")
def prism():
    body = shapes.box(cells=5, label=lambda centre: int(centre[2] > 0.999))
    return body, galerkin_matrices(body.vertices - 0.5, body.faces)


@slow
@pytest.mark.parametrize("permeability", [np.inf, 2.0, 20.0])
def test_prism_with_one_end_open_or_partly_open(prism, permeability):
    body, matrices = prism
    answer = solved(body, labelled(body), permeability=permeability, matrices=matrices)
    # 300 panels, without any grading towards the edge of the window: 2.1e-3 off, and 2.7e-3 in the share.
    assert answer.mean_time_s == pytest.approx(exact.prism_mean(1.0, permeability=permeability), rel=3e-3)
    assert answer.shares == pytest.approx([1.0], abs=5e-3)


@slow
def test_a_very_large_permeability_is_perfect_absorption(prism):
    body, matrices = prism
    nearly = solved(body, labelled(body), permeability=1e7, matrices=matrices)
    fully = solved(body, labelled(body), matrices=matrices)
    # Two discretisations of the same thing: the first keeps the time on the window as an unknown.
    assert nearly.mean_time_s == pytest.approx(fully.mean_time_s, rel=2e-3)


@slow
def test_times_scale_with_diffusion_at_a_fixed_ratio_of_permeability(prism):
    body, matrices = prism
    one = solved(body, labelled(body), permeability=2.0, matrices=matrices)
    ten = solved(body, labelled(body), diffusion=10.0, permeability=20.0, matrices=matrices)
    assert ten.mean_time_s == pytest.approx(one.mean_time_s / 10.0, rel=1e-12)
    assert ten.shares == pytest.approx(one.shares, rel=1e-12)


@slow
@pytest.mark.parametrize(
    ("label", "mean"), [(1, exact.shell_mean_inner_open(1.0, 2.0)), (2, exact.shell_mean_outer_open(1.0, 2.0))]
)
def test_shell_with_the_other_side_closed(label, mean):
    """With label 2 the inner shell is an obstacle, whose constant the plain symmetric system does not see."""
    body = shapes.shell(1.0, 2.0, 2)
    # 400 panels; each ball has its own volume, the layer between them not quite.
    assert solved(body, labelled(body, label)).mean_time_s == pytest.approx(mean, rel=2e-2)


def test_the_windows_are_the_only_unknown_flux_and_the_rest_the_only_unknown_time():
    """Without bempp-cl: matrices of a body whose operators are all 0 except for what makes the system solvable."""
    body = shapes.box(cells=1, label=lambda centre: int(centre[2] > 0.999))
    panels, corners = len(body.faces), len(body.vertices)
    matrices = GalerkinMatrices(
        np.eye(panels), np.zeros((panels, corners)), np.eye(corners), np.zeros((panels, corners))
    )
    answer = solved(body, labelled(body), matrices=matrices)
    assert answer.unknowns == 2 + 4
    assert (answer.panel_slope_s_per_um[labelled(body) < 0] == 0.0).all()
    assert (answer.vertex_time_s[body.vertices[:, 2] > 0.999] == 0.0).all()
    # V q = −V g and W u = −W φ then, with g = x·n/3 and φ = |x|²/6 about the middle.
    assert answer.panel_slope_s_per_um[labelled(body) == 0] == pytest.approx(-0.5 / 3.0)
    assert answer.vertex_time_s[body.vertices[:, 2] < 0.001] == pytest.approx(-0.75 / 6.0)
