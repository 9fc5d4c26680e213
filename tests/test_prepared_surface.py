"""A prepared surface gives what a fresh solve gives, and what closed forms say."""

import dataclasses

import numpy as np
import pytest

import bemescape
from bemescape import SettingsError, SurfaceError, Window, prepare, prepared_surface, solve_escape
from bemescape.surface.surface import Surface
from exact import prism_mean
from shapes import ball, box, on_ball

TARGET = 0.02


def top(permeability=None):
    return Window.labels("top", array="label", value=1, permeability=permeability)


@pytest.fixture(scope="module")
def prism():
    """A unit cube whose top is the window, and the results for κ = ∞, 2 and 0.5 on one prepared surface, D = 1."""
    surface = box(cells=4, label=lambda centre: int(centre[2] > 0.999))
    prepared = prepare(surface)
    return surface, [prepared.solve([top(kappa)], 1.0, target=TARGET) for kappa in (None, 2.0, 0.5)]


def test_another_permeability_gives_the_closed_form_on_the_kept_meshes(prism):
    _, results = prism
    for kappa, result in zip((np.inf, 2.0, 0.5), results, strict=True):
        exact = prism_mean(1.0, permeability=kappa)
        assert abs(result.mean_time_s / exact - 1.0) < max(result.relative_error, 1e-3)
    assert [row["kept_rows"] for row in results[0].levels] == [0.0] * len(results[0].levels)
    for result in results[1:]:
        assert [row["kept_rows"] for row in result.levels] == [1.0] * len(result.levels)
        assert [row["panels"] for row in result.levels] == [row["panels"] for row in results[0].levels]


def test_another_permeability_agrees_with_a_fresh_solve_within_both_errors(prism):
    surface, (_, kept, _) = prism
    fresh = solve_escape(surface, [top(2.0)], 1.0, target=TARGET)
    allowed = kept.relative_error + fresh.relative_error
    assert abs(kept.mean_time_s / fresh.mean_time_s - 1.0) < allowed
    assert kept.escape_time_sd_s == pytest.approx(fresh.escape_time_sd_s, rel=2.0 * allowed)


@pytest.fixture(scope="module")
def moved():
    """A disc elsewhere and smaller than the one before it on a prepared ball, and the same on a fresh one."""
    surface = ball(2)
    prepared = prepare(surface)
    before, after = (
        [Window.disc("pore", centre=on_ball(surface, direction), radius=radius)]
        for direction, radius in (([0.3, 0.2, 0.9], 0.3), ([0.3, -0.8, 0.2], 0.25))
    )
    prepared.solve(before, 1.0, target=0.05)
    return prepared.solve(after, 1.0, target=0.05), solve_escape(surface, after, 1.0, target=0.05)


def test_another_radius_and_place_give_the_fresh_solve_on_the_same_meshes(moved):
    kept, fresh = moved
    np.testing.assert_array_equal(kept.faces, fresh.faces)
    # Near-field rows are equal to the bit, up to the order of one sum: only rounding may differ.
    assert kept.mean_time_s == pytest.approx(fresh.mean_time_s, rel=1e-7)
    assert kept.relative_error == pytest.approx(fresh.relative_error, rel=1e-3)
    assert kept.escape_time_sd_s == pytest.approx(fresh.escape_time_sd_s, rel=1e-6)


def test_rows_away_from_the_windows_are_kept(moved):
    assert all(0.0 < row["kept_rows"] < 1.0 for row in moved[0].levels)


# -- another D -------------------------------------------------------------------------------------------


def test_another_d_scales_every_time_as_a_fresh_solve_does():
    surface = box(cells=4, label=lambda centre: int(centre[2] > 0.999))
    ask = {"target": TARGET, "start": {"middle": (0.5, 0.5, 0.5)}, "ways_out": True}
    slow, fast = (solve_escape(surface, [top()], d, **ask) for d in (1.0, 4.0))
    scaled = slow.with_diffusion("4 um^2/s")
    assert scaled.mean_time_s == pytest.approx(slow.mean_time_s / 4.0, rel=1e-12)
    for one, other in ((scaled.summary, fast.summary), (slow.with_diffusion(1.0).summary, slow.summary)):
        mine, theirs = (summary.model_dump(exclude={"wall_s", "made_with"}) for summary in (one, other))
        assert_alike(mine, theirs)


def assert_alike(one, other):
    """Equal, numbers to rounding."""
    if isinstance(one, dict):
        assert one.keys() == other.keys()
        for key in one:
            assert_alike(one[key], other[key])
    elif isinstance(one, list | tuple):
        assert len(one) == len(other)
        for a, b in zip(one, other, strict=True):
            assert_alike(a, b)
    elif isinstance(one, float):
        assert one == pytest.approx(other, rel=1e-6, abs=1e-12)
    elif not isinstance(one, str):  # sentences print their numbers
        assert one == other


def test_another_d_with_absorbing_windows_is_answered_without_solving(prism, monkeypatch):
    surface, (absorbing, _, _) = prism
    prepared = prepare(surface)
    prepared._asked = prepared_surface._Asked(
        (top(),), {"target": TARGET, "ways_out": None}, absorbing
    )  # fmt: skip
    monkeypatch.setattr(prepared_surface, "solve_on", None)
    assert prepared.solve([top()], 10.0, target=TARGET).mean_time_s == pytest.approx(absorbing.mean_time_s / 10.0)
    with pytest.raises(TypeError):
        prepared.solve([top(3.0)], 10.0, target=TARGET)


def test_a_partly_open_window_does_not_scale_with_d_alone(prism):
    _, (_, partly, _) = prism
    with pytest.raises(SettingsError, match=r"'top' has a permeability of 2 µm/s"):
        partly.with_diffusion(2.0)
    assert partly.with_diffusion(1.0) is partly


def test_second_opinions_are_not_scaled(prism):
    _, (absorbing, _, _) = prism
    held = dataclasses.replace(absorbing, crosschecked="an opinion on the other numbers")
    assert held.with_diffusion(2.0).crosschecked is None


def test_an_open_surface_is_refused_when_it_is_prepared():
    closed = ball(1)
    with pytest.raises(SurfaceError, match="cannot be solved"):
        bemescape.prepare(Surface(closed.vertices, closed.faces[1:]))
