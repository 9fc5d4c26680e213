"""The direct sums and the fast ones are one far field."""

import numpy as np
import pytest

import shapes
from bemescape.bem import sums
from bemescape.bem.panels import make_panels
from bemescape.windows.grade import Fineness, graded, place_windows
from bemescape.windows.window import Window


@pytest.fixture(scope="module")
def panels():
    surface = shapes.ball(3)
    window = Window.disc("cap", centre=shapes.on_ball(surface, (0.3, 0.5, 0.8)), radius=0.4)
    mesh = graded(place_windows(surface, [window]), Fineness(24.0, 6, 3000.0))
    return make_panels(mesh.vertices[mesh.faces])


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["single", "double", "lifted"])
def test_fast_sums_agree_with_every_pair(panels, kind):
    density = 1.0 + np.random.default_rng(0).random(len(panels))
    used = np.arange(len(panels))
    fast = getattr(sums._FastSums(panels), kind)(used, density)
    direct = getattr(sums.DirectSums(panels), kind)(used, density)
    # Ten times the tolerance asked for: the sums of a graded mesh, largest of all targets relative to the norm.
    assert np.linalg.norm(fast - direct) < 10 * sums.FAST_TOLERANCE * np.linalg.norm(direct)


@pytest.mark.slow
def test_the_mean_time_does_not_feel_which_sums_are_used(monkeypatch):
    from bemescape import solve_escape

    surface = shapes.ball(3)
    window = Window.disc("cap", centre=shapes.on_ball(surface, (0.3, 0.5, 0.8)), radius=0.4)
    means = []
    for limit in (10**9, 1):
        monkeypatch.setattr(sums, "FAST_FROM", limit)
        means.append(solve_escape(surface, [window], 1.0, target=0.02).mean_time_s)
    # A tenth of the strictest sensible target (0.05 %); measured 6e-7.
    assert means[1] == pytest.approx(means[0], rel=5e-5)
