"""Second moments against closed forms, an identity on an irregular shape, and the bound for the survival."""

from pathlib import Path

import numpy as np
import pytest
from one_mesh import solved_once

import exact
import shapes
from bemescape import SettingsError, Window, read_surface
from bemescape.results.spread import Spread, exponential_statement

DEMO = Path(__file__).parents[2] / "meshes"
#: Error of the coarsest resolution for second moments, which have twice that of the mean: measured 0.4 % and less.
COARSE = 0.006


def labelled(value, permeability=None):
    return Window.labels(f"label {value}", array="label", value=value, permeability=permeability)


def spread(mean, cv, **changes):
    values = {"panel_second_moment_s2": np.zeros(1), "panel_second_slope_s2_per_um": np.zeros(1)}
    return Spread(**(values | {"mean_time_s": mean, "cv": cv, "relative_error": 0.0, "balance": 0.0} | changes))


@pytest.fixture(scope="module")
def slab():
    return shapes.box(cells=6, label=lambda c: int(c[0] < 1e-9))


@pytest.mark.parametrize("permeability", [None, 3.0])
def test_slab_with_one_end_open(slab, permeability):
    result = solved_once(slab, [labelled(1, permeability)], rim=0)
    kappa = permeability or np.inf
    far, uniform = exact.slab_second_moments(1.0, kappa)
    assert result.spread.second_moment_s2 == pytest.approx(uniform, rel=COARSE)
    mean = exact.prism_far_end(1.0) + 1.0 / kappa
    # Inside beside the closed end, and on it: the sections of code for points inside and on the wall.
    sd = result.time_sd_at([[0.999, 0.52, 0.47], [1.0, 0.52, 0.47]])
    np.testing.assert_allclose(sd, np.sqrt(far - mean**2), rtol=COARSE)


@pytest.mark.parametrize("permeability", [None, 2.0])
def test_ball_open_everywhere(permeability):
    surface = shapes.ball(3)
    everywhere = Window.labels("wall", array="all", value=1, permeability=permeability)
    surface = type(surface)(surface.vertices, surface.faces, {"all": np.ones(len(surface.faces))})
    result = solved_once(surface, [everywhere])
    kappa = permeability or np.inf
    centre, uniform = exact.ball_second_moments(kappa)
    assert result.spread.second_moment_s2 == pytest.approx(uniform, rel=COARSE)
    mean = 1.0 / 6.0 + 1.0 / (3.0 * kappa)
    assert result.time_sd_at([[0.0, 0.0, 0.0]])[0] == pytest.approx(np.sqrt(centre - mean**2), rel=COARSE)


def test_shells_with_one_wall_open():
    surface = shapes.shell(subdivisions=3)
    inner, outer = (solved_once(surface, [labelled(value)]) for value in (1, 2))
    assert inner.spread.second_moment_s2 == pytest.approx(exact.SHELL_SECOND_MOMENT_INNER, rel=COARSE)
    assert outer.spread.second_moment_s2 == pytest.approx(exact.SHELL_SECOND_MOMENT_OUTER, rel=COARSE)


@pytest.mark.parametrize("eps", [0.5, 1.0])
def test_cv_of_one_cap(eps):
    surface = shapes.ball(3)
    place = shapes.on_ball(surface, (0.3, 0.5, 0.81))
    result = solved_once(surface, [Window.disc("cap", centre=place, radius=2.0 * np.sin(eps / 2.0))])
    # The ratio is much better than the moments: 1e-3 leaves room for the rim's coarseness.
    assert result.spread.cv**2 == pytest.approx(exact.CAP_CV2[eps], abs=2e-3)


def test_second_moment_is_twice_the_mean_square_of_the_time_on_an_irregular_shape():
    """⟨T²⟩ = 2⟨u²⟩ for a uniform start (integrate m Δu = u Δm): m by its own solve, u² by points inside."""
    surface = read_surface(DEMO / "bouton.ply", unit="nm")
    result = solved_once(surface, [labelled(1)], rim=0)
    points = np.random.default_rng(3).uniform(*surface.bounds, size=(3000, 3))
    times = result.time_at(points, outside="nan")
    squares = times[np.isfinite(times)] ** 2
    standard_error = squares.std() / np.sqrt(len(squares))
    assert standard_error < 0.01 * squares.mean()
    # Three standard errors of the sample, and 0.1 % for the two ways of being discrete.
    limit = 2.0 * (3.0 * standard_error + 1e-3 * squares.mean())
    assert abs(result.spread.second_moment_s2 - 2.0 * squares.mean()) < limit
    # The outflow of this coarse mesh itself is off by 0.2 %.
    assert abs(result.spread.balance) < 2.0 * abs(result.balance)


def slab_survival(t, terms=200):
    """Part still inside a slab with one end open, L = D = 1: Σ 8/((2n+1)²π²) exp(−(2n+1)²π²t/4), Crank (1975) 4.18."""
    odd = 2.0 * np.arange(terms) + 1.0
    return (8.0 / (odd * np.pi) ** 2 * np.exp(-((odd * np.pi / 2.0) ** 2) * t[:, None])).sum(axis=1)


def ball_survival(t, terms=200):
    """Part still inside the unit ball, its whole wall open: (6/π²) Σ exp(−n²π²t)/n², Crank (1975) 6.20."""
    n = np.arange(1, terms + 1)
    return (6.0 / (np.pi * n) ** 2 * np.exp(-((n * np.pi) ** 2) * t[:, None])).sum(axis=1)


@pytest.mark.parametrize(
    ("survival", "mean", "cv2"), [(slab_survival, 1.0 / 3.0, 7.0 / 5.0), (ball_survival, 1.0 / 15.0, 13.0 / 7.0)]
)
def test_the_part_still_inside_keeps_within_the_bound(survival, mean, cv2):
    found = spread(mean, np.sqrt(cv2))
    t = np.linspace(0.0, 12.0 * mean, 4000)[1:]
    difference = np.abs(survival(t) - np.exp(-t / mean)).max()
    # The bound must hold, and be of the size of what it bounds.
    assert 0.3 * found.exponential_within < difference <= found.exponential_within


def test_the_statement_tells_the_three_regimes_apart():
    assert "single rate" in exponential_statement(spread(1.0, 1.001))
    assert "until about" in exponential_statement(spread(1.0, 1.05))
    assert "one rate does not describe it" in exponential_statement(spread(1.0, 1.2))


def test_a_deterministic_time_below_exponential_gives_no_negative_bound():
    assert spread(1.0, 0.9).exponential_within == 0.0


def test_a_point_outside_is_refused_with_its_place(slab):
    result = solved_once(slab, [labelled(1)], rim=0)
    with pytest.raises(SettingsError, match=r"point 1 of 1 at \(2, 0.5, 0.5\) µm lies outside"):
        result.time_sd_at([[2.0, 0.5, 0.5]])
    assert np.isnan(result.time_sd_at([[2.0, 0.5, 0.5]], outside="nan")).all()
