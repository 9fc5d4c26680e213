"""Particles against closed forms. Seeds are fixed, so that three standard errors never fail by chance."""

import numpy as np
import pytest

import exact
import shapes
from bemescape.bem.walkers import walk
from bemescape.errors import AccuracyError
from bemescape.progress import silent
from bemescape.threads import use_threads
from bemescape.windows.grade import Fineness, graded, place_windows
from bemescape.windows.window import Window


def sent(body, panel_window, rate=np.inf, *, walkers=6000, **options):
    rate = np.atleast_1d(np.asarray(rate, dtype=float))
    return walk(body.vertices, body.faces, panel_window, rate, walkers=walkers, **options)


def labelled(body):
    return np.where(body.face_data["label"] == 1, 0, -1)


def is_within_three_errors(tally, mean):
    assert tally.lost == 0
    # Small enough that a factor, not only a gross blunder, shows.
    assert tally.mean_error < 0.03 * mean
    assert tally.mean == pytest.approx(mean, abs=3.0 * tally.mean_error)


@pytest.mark.parametrize("permeability", [np.inf, 2.0, 20.0])
def test_prism_with_one_end_open_or_partly_open(permeability):
    body = shapes.box(cells=4, label=lambda centre: int(centre[2] > 0.999))
    is_within_three_errors(sent(body, labelled(body), permeability), exact.prism_mean(1.0, permeability=permeability))


@pytest.mark.parametrize("permeability", [np.inf, 3.0])
def test_ball_that_is_open_all_around(permeability):
    body = shapes.ball(3)
    everywhere = np.zeros(len(body.faces), dtype=int)
    is_within_three_errors(
        sent(body, everywhere, permeability), exact.absorbing_ball_mean(1.0, permeability=permeability)
    )


def test_around_an_obstacle():
    body = shapes.shell(1.0, 2.0, 3)
    is_within_three_errors(
        sent(body, np.where(body.face_data["label"] == 2, 0, -1)), exact.shell_mean_outer_open(1.0, 2.0)
    )


def test_through_a_neck():
    """Its mouth is where walls turn out of sight: with balls that reach past it the mean is 6.5."""
    body = shapes.box_with_neck()
    is_within_three_errors(sent(body, labelled(body), walkers=3000), exact.NECK_ALL)


def test_small_square_window_in_a_face():
    body = shapes.box(cells=10, label=lambda centre: int(centre[2] > 0.999 and np.abs(centre[:2] - 0.5).max() < 0.2))
    is_within_three_errors(sent(body, labelled(body)), exact.CUBE_CENTRED_WINDOW[0.4])


def test_a_hardly_open_window_in_a_face_resists_by_its_area():
    """V/(κA) and on top of it what lies between the absorbing window's mean and that of uniform outflow, 10 % more."""
    body = shapes.box(cells=10, label=lambda centre: int(centre[2] > 0.999 and np.abs(centre[:2] - 0.5).max() < 0.2))
    tally = sent(body, labelled(body), 0.5, walkers=3000)
    is_within_three_errors(tally, 1.0 / (0.5 * 0.16) + 1.05 * exact.CUBE_CENTRED_WINDOW[0.4])


def test_two_unequal_caps_share_the_walkers():
    body = shapes.ball(3)
    windows = [
        Window.disc(name, centre=shapes.on_ball(body, (0, 0, side)), radius=2.0 * np.sin(angle / 2.0))
        for name, side, angle in (("small", 1.0, 0.1), ("large", -1.0, 0.2))
    ]
    mesh = graded(place_windows(body, windows), Fineness(36.0, 3, 500.0))
    tally = walk(mesh.vertices, mesh.faces, mesh.window_of, np.full(2, np.inf), walkers=5000)
    is_within_three_errors(tally, exact.UNEQUAL_CAPS_MEAN)
    assert tally.shares.sum() == pytest.approx(1.0)
    assert tally.shares[0] == pytest.approx(exact.UNEQUAL_CAPS_SHARE, abs=3.0 * tally.share_errors[0])
    assert tally.share_errors[0] < 0.01


def test_the_same_seed_gives_the_same_answer_on_any_number_of_threads():
    body = shapes.box(cells=2, label=lambda centre: int(centre[2] > 0.999))
    with use_threads(1):
        alone = sent(body, labelled(body), walkers=300, seed=7)
    with use_threads(3):
        together = sent(body, labelled(body), walkers=300, seed=7)
    other = sent(body, labelled(body), walkers=300, seed=8)
    assert alone.mean == together.mean
    assert alone.mean != other.mean


def test_an_open_surface_loses_its_walkers_and_is_refused():
    body = shapes.box(cells=2, label=lambda centre: int(centre[2] > 0.999))
    kept = body.normals[:, 0] < 0.5
    with pytest.raises(AccuracyError, match=r"of 300 walkers were lost \(limit 1%\)"):
        walk(body.vertices, body.faces[kept], labelled(body)[kept], np.array([np.inf]), walkers=300)


def test_progress_can_stop_the_walkers():
    body = shapes.box(cells=2, label=lambda centre: int(centre[2] > 0.999))

    def stop(event):
        if event.done:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        sent(body, labelled(body), walkers=10_000_000, progress=stop)
    assert sent(body, labelled(body), walkers=100, progress=silent).walkers == 100
