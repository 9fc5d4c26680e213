"""The reduced model against published and exact values on the unit ball (`exact.py` has the sources)."""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from bemescape import Window
from bemescape.arrangements.reduced import reduced_model
from bemescape.arrangements.sites import candidate_sites
from exact import BALL_VOLUME, CAP_MEAN, PLATONIC_CAPS, ROBIN_CAP_MEAN, TWO_EQUAL_CAPS
from shapes import ball, on_ball

#: Half-angle of the caps; a disc window is given by its chord.
EPS = 0.1
#: What 3 000 flat panels and six fluxes to a window may be off: measured 0.1 to 0.7 %.
WITHIN = 0.01
GOLDEN = (1.0 + 5.0**0.5) / 2.0
ICOSAHEDRON = np.array(
    [point for x in (-1, 1) for y in (-GOLDEN, GOLDEN) for point in ((0, x, y), (x, y, 0), (y, 0, x))]
)


def model_on_ball(directions, eps, *, rho=0.0, subdivisions=4):
    surface = ball(subdivisions)
    sites = Window.points(
        "site", positions=[on_ball(surface, place) for place in directions], radius=2.0 * np.sin(eps / 2.0)
    )
    return reduced_model(candidate_sites(surface, sites, 1), rho)


@pytest.fixture(scope="module")
def thirteen():
    """Caps at the corners of an icosahedron, one more at an angle of 0.25 from the first, and the first's antipode."""
    # Turned, so that corners do not fall on those of the mesh.
    corners = ICOSAHEDRON @ Rotation.from_rotvec([0.3, 0.5, 0.7]).as_matrix().T
    corners /= np.linalg.norm(corners, axis=1)[:, None]
    across = np.cross(corners[0], [0.2, 1.0, 0.1])
    across /= np.linalg.norm(across)
    near = np.cos(0.25) * corners[0] + np.sin(0.25) * across
    return model_on_ball([*corners, near], EPS), int((corners @ corners[0]).argmin())


def test_one_window_has_the_time_of_one_cap(thirteen):
    model, _ = thirteen
    np.testing.assert_allclose(model.mean_times(np.arange(13)[:, None]), CAP_MEAN[EPS], rtol=WITHIN)


def test_two_windows_close_together_lose_what_the_exact_solution_says(thirteen):
    model, antipode = thirteen
    near, far = model.mean_times(np.array([[0, 12], [0, antipode]]))
    assert near == pytest.approx(TWO_EQUAL_CAPS[0.1, 0.25], rel=WITHIN)
    assert far == pytest.approx(TWO_EQUAL_CAPS[0.1, np.pi], rel=WITHIN)
    # 31.6 % by the exact values; the errors of single windows cancel in the ratio.
    assert near / far - 1.0 == pytest.approx(0.316, abs=0.006)


def test_windows_on_an_icosahedron_have_the_time_of_the_spectral_solution(thirteen):
    model, _ = thirteen
    assert model.mean_times(np.arange(12)[None])[0] == pytest.approx(PLATONIC_CAPS[12, 0.1], rel=WITHIN)


def test_shares_of_equal_windows_in_equal_places_are_equal_and_sum_to_one(thirteen):
    model, _ = thirteen
    shares = model.shares(range(12))
    assert shares.sum() == pytest.approx(1.0, abs=1e-12)
    np.testing.assert_allclose(shares, 1.0 / 12.0, rtol=0.02)


def test_a_crowded_window_takes_less(thirteen):
    model, antipode = thirteen
    first, near, far = model.shares([0, 12, antipode])
    assert far > 1.1 * first
    assert first == pytest.approx(near, rel=0.02)


def test_the_model_is_reciprocal_before_it_is_made_so(thirteen):
    assert thirteen[0].asymmetry < 1e-3


def test_the_volume_is_that_of_the_ball(thirteen):
    assert thirteen[0].volume == pytest.approx(BALL_VOLUME, rel=1e-6)


def test_more_windows_never_make_the_time_longer(thirteen):
    model, _ = thirteen
    times = [model.mean_times(np.arange(k)[None])[0] for k in range(1, 14)]
    assert (np.diff(times) < 0.0).all()


def test_a_partly_open_window_has_the_time_of_the_partly_open_cap():
    model = model_on_ball([[0.3, 0.2, 0.9], [-0.3, -0.2, -0.9]], 0.5, rho=0.1, subdivisions=3)
    np.testing.assert_allclose(model.mean_times(np.array([[0], [1]])), ROBIN_CAP_MEAN[0.5, 10.0], rtol=WITHIN)


@pytest.mark.slow
@pytest.mark.parametrize("gamma", [0.22, 0.3, 0.5])
def test_two_windows_at_any_distance_down_to_a_tenth_of_a_diameter(gamma):
    first = np.array([0.3, 0.2, 0.93])
    first /= np.linalg.norm(first)
    across = np.cross(first, [0.2, 1.0, 0.1])
    across /= np.linalg.norm(across)
    model = model_on_ball([first, np.cos(gamma) * first + np.sin(gamma) * across], EPS)
    assert model.mean_times(np.array([[0, 1]]))[0] == pytest.approx(TWO_EQUAL_CAPS[0.1, gamma], rel=WITHIN)
