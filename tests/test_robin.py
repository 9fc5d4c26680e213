"""Partly open windows, D ∂u/∂n = −κu: closed forms, published-quality numbers, and both limits."""

import numpy as np
import pytest
from one_mesh import solved_once

import exact
import shapes
import verification_cases as cases
from bemescape import SettingsError, Surface, Window
from verification_cases import cap, labelled

#: Error of the coarsest resolution, measured: 0.1 to 0.3 %.
COARSE = 0.005


@pytest.fixture(scope="module")
def ball():
    return shapes.ball(3)


@pytest.mark.parametrize("case", cases.PARTLY_OPEN_PRISMS, ids=str)
def test_prism_with_one_end_partly_open(case):
    assert case.solved_once(rim=0).mean_time_s == pytest.approx(case.mean, rel=COARSE)


@pytest.mark.parametrize("kappa", [1.0, 10.0])
def test_ball_partly_open_everywhere(ball, kappa):
    surface = Surface(ball.vertices, ball.faces, {"label": np.ones(len(ball.faces))})
    result = solved_once(surface, [labelled(permeability=kappa)])
    assert result.mean_time_s == pytest.approx(exact.absorbing_ball_mean(1.0, permeability=kappa), rel=COARSE)
    # The flux is V/A everywhere, and u = q/κ on the wall.
    np.testing.assert_allclose(result.panel_time_s, 1.0 / (3.0 * kappa), rtol=0.02)


@pytest.mark.parametrize(("label", "mean"), [(1, exact.SHELL_MEAN_INNER_ROBIN), (2, exact.SHELL_MEAN_OUTER_ROBIN)])
def test_shell_with_one_wall_partly_open(label, mean):
    result = solved_once(shapes.shell(subdivisions=3), [labelled(label, permeability=1.0)])
    assert result.mean_time_s == pytest.approx(mean, rel=COARSE)


@pytest.mark.parametrize(("eps", "kappa"), list(exact.ROBIN_CAP_MEAN))
def test_cap_on_the_ball(ball, eps, kappa):
    result = solved_once(ball, [cap(ball, eps, permeability=kappa)])
    assert result.mean_time_s == pytest.approx(exact.ROBIN_CAP_MEAN[eps, kappa], rel=COARSE)


def test_a_very_permeable_window_absorbs(ball):
    absorbing = solved_once(ball, [cap(ball, 0.5)]).mean_time_s
    open_wide = solved_once(ball, [cap(ball, 0.5, permeability=1e6)]).mean_time_s
    # V/(κA) = 5e-6 s and its product with the logarithm at the rim: on the same mesh nothing else may differ.
    assert open_wide == pytest.approx(absorbing, rel=1e-4)
    assert open_wide > absorbing


def test_a_nearly_closed_window_limits_the_escape_by_its_permeability(ball):
    kappa = 0.05
    result = solved_once(ball, [cap(ball, 0.5, permeability=kappa)])
    barrier = exact.BALL_VOLUME / (kappa * result.windows[0].area_um2)
    # κ → 0: V/(κA) + the constant of a uniform flux, an upper bound (Grebenkov & Oshanin 2017,
    # doi:10.1039/C6CP06102H, call V/(κA) the barrier-limited part).
    assert result.mean_time_s - barrier == pytest.approx(exact.CAP_UNIFORM_FLUX, rel=0.03)


def test_resistances_in_series_underrate_a_half_open_disc_by_three_per_cent(ball):
    """Diffusion to the disc and its barrier do not add up: the flux is pushed away from the rim, where it was large."""
    eps, kappa = 0.1, 10.0
    window = cap(ball, eps, permeability=kappa)
    result = solved_once(ball, [window])
    in_series = exact.CAP_MEAN[eps] + exact.BALL_VOLUME / (kappa * exact.CAP_AREA[eps])
    defect = result.mean_time_s / in_series - 1.0
    assert defect == pytest.approx(exact.ROBIN_CAP_MEAN[eps, kappa] / in_series - 1.0, abs=COARSE)
    assert 0.025 < defect < 0.04
    # The same in a flat wall, where κa/D = 1: the exact conductance of the disc in place of the series law moves the
    # mean time by V/(4Da)·(1/0.4267 − 1/0.4399).
    radius = window.shape.radius_um
    flat = exact.BALL_VOLUME / (4.0 * radius) * (1.0 / exact.ROBIN_DISC - 1.0 / exact.ROBIN_DISC_IN_SERIES)
    assert result.mean_time_s - in_series == pytest.approx(flat, rel=0.15)


def test_an_open_and_a_partly_open_window_share_the_exits():
    surface = shapes.box(cells=6, label=lambda c: int(c[0] < 1e-9) + 2 * int(c[0] > 1.0 - 1e-9))
    result = solved_once(surface, [labelled(1, "open"), labelled(2, "partly", 3.0)], rim=0)
    assert result.mean_time_s == pytest.approx(exact.slab_two_ends_mean(1.0, np.inf, 3.0), rel=COARSE)
    assert result.shares["open"] == pytest.approx(exact.slab_splitting(0.5, 1.0, np.inf, 3.0), rel=COARSE)


def test_a_permeability_below_zero_is_refused_with_its_value():
    with pytest.raises(SettingsError, match="permeability is -10 µm/s; it must be a finite number above 0"):
        Window.disc("neck", centre=(0.0, 0.0, 0.0), radius=0.1, permeability="-10 um/s")
