"""The search against arrangements that are known to be best, and against trying all."""

import itertools
import math

import numpy as np
import pytest

from bemescape import Window
from bemescape.arrangements.reduced import reduced_model
from bemescape.arrangements.search import clustered, searched, spread_out
from bemescape.arrangements.sites import candidate_sites
from exact import LEAST_CAPS_INTERACTION, caps_interaction
from shapes import ball, fibonacci, on_ball

TETRAHEDRON = np.array([[1, 1, 1], [1, -1, -1], [-1, 1, -1], [-1, -1, 1]]) / 3.0**0.5
OCTAHEDRON = np.concatenate([np.eye(3), -np.eye(3)])


def interactions(places):
    """H of each arrangement: a stand-in for the mean time whose least arrangements are published."""
    return lambda rows: np.array([caps_interaction(places[row]) for row in rows])


@pytest.mark.parametrize(("k", "known"), [(4, TETRAHEDRON), (6, OCTAHEDRON)])
def test_the_search_finds_the_published_best_arrangement_among_many_sites(k, known):
    places = np.concatenate([fibonacci(40), known])
    assert math.comb(len(places), k) > 10_000  # so that it cannot try all
    found = searched(interactions(places), places, k, most=10_000, seed=1)
    assert not found.complete
    assert found.tried <= 11_000
    assert caps_interaction(places[found.best]) == pytest.approx(LEAST_CAPS_INTERACTION[k], abs=1e-8)
    assert (found.best == np.arange(40, 40 + k)).all()


def test_the_worst_arrangement_is_worse_than_any_random_one_and_than_the_clustered():
    places = fibonacci(40)
    found = searched(interactions(places), places, 5, most=5_000, seed=2)
    worst = caps_interaction(places[found.worst])
    assert worst >= found.sampled.max()
    assert worst >= caps_interaction(places[clustered(places, 5)])


def test_few_arrangements_are_all_tried():
    places = fibonacci(9)
    found = searched(interactions(places), places, 3, most=100, seed=0)
    all_of_them = [caps_interaction(places[list(row)]) for row in itertools.combinations(range(9), 3)]
    assert found.complete
    assert found.tried == len(all_of_them) == 84
    assert caps_interaction(places[found.best]) == min(all_of_them)
    assert caps_interaction(places[found.worst]) == max(all_of_them)


def test_clustered_sites_are_neighbours_and_spread_ones_are_not():
    places = np.concatenate([OCTAHEDRON, [[0.995, 0.0998, 0.0], [0.995, 0.0, 0.0998]]])
    assert clustered(places, 3).tolist() == [0, 6, 7]
    apart = spread_out(places, 2)
    assert np.linalg.norm(places[apart[0]] - places[apart[1]]) == pytest.approx(2.0)


@pytest.fixture(scope="module")
def dodecahedron():
    """Sites at the corners of a dodecahedron on a ball; the mesh has their symmetry."""
    golden = (1.0 + 5.0**0.5) / 2.0
    cube = np.array(list(itertools.product((-1.0, 1.0), repeat=3)))
    rest = [
        np.roll([0.0, a / golden, b * golden], shift) for a in (-1, 1) for b in (-1, 1) for shift in range(3)
    ]  # fmt: skip
    surface = ball(3)
    places = [on_ball(surface, place) for place in [*cube, *rest]]
    sites = candidate_sites(surface, Window.points("site", positions=places, radius=0.2), 4)
    return sites.places_um / np.linalg.norm(sites.places_um, axis=1)[:, None], reduced_model(sites, 0.0)


@pytest.mark.parametrize("k", [2, 4])
def test_on_a_ball_the_model_prefers_the_published_arrangement(dodecahedron, k):
    places, model = dodecahedron
    found = searched(model.mean_times, places, k, most=10_000, seed=0)
    assert found.complete
    # Antipodes, and one of the tetrahedra among the corners of a dodecahedron.
    assert caps_interaction(places[found.best]) == pytest.approx(LEAST_CAPS_INTERACTION[k], abs=2e-3)
