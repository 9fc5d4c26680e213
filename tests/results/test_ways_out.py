"""Splitting probabilities, conditional times and start regions, against closed forms and identities."""

from dataclasses import replace

import numpy as np
import pytest
from one_mesh import solved_once

import exact
import shapes
from bemescape import Ball, SettingsError, SolverSettings, Window, solve_escape
from bemescape.results.starts import check_starts, results_from_starts
from bemescape.results.store import load_result, save_result
from bemescape.results.ways_out import chosen_windows

AXIS = np.array([0.3, 0.5, 0.81]) / np.linalg.norm([0.3, 0.5, 0.81])
#: Error of the coarsest resolution, measured: probabilities 1e-3 to 2e-3 of themselves, times 3e-3.
COARSE = 0.004


def labelled(value, name, permeability=None):
    return Window.labels(name, array="label", value=value, permeability=permeability)


def two_ended_slab(kappa_0=None, kappa_1=None):
    surface = shapes.box(cells=6, label=lambda c: int(c[0] < 1e-9) + 2 * int(c[0] > 1.0 - 1e-9))
    windows = [labelled(1, "low", kappa_0), labelled(2, "high", kappa_1)]
    # At right angles to the wall a window has no singular rim: the coarsest will do.
    return surface, solved_once(surface, windows, rim=0, ways_out=True)


@pytest.fixture(scope="module")
def slab():
    return two_ended_slab()


@pytest.fixture(scope="module")
def caps():
    """Two unequal antipodal caps on the ball."""
    surface = shapes.ball(3)
    windows = [
        Window.disc(name, centre=shapes.on_ball(surface, side * AXIS), radius=2.0 * np.sin(eps / 2.0))
        for name, side, eps in (("small", 1.0, 0.1), ("large", -1.0, 0.5))
    ]
    return surface, solved_once(surface, windows, ways_out=True)


INSIDE = np.array([[0.1, 0.52, 0.47], [0.5, 0.5, 0.5], [0.9, 0.41, 0.6]])


def test_slab_with_both_ends_absorbing(slab):
    _, result = slab
    low = result.splitting_at(INSIDE)[0]
    np.testing.assert_allclose(low, exact.slab_splitting(INSIDE[:, 0], 1.0, np.inf, np.inf), rtol=COARSE)
    times = result.conditional_time_at(INSIDE)
    np.testing.assert_allclose(times[0], exact.slab_conditional_time(INSIDE[:, 0], 1.0), rtol=COARSE)
    np.testing.assert_allclose(times[1], exact.slab_conditional_time(1.0 - INSIDE[:, 0], 1.0), rtol=COARSE)
    # Uniform start: ∫ g / ∫ w = (L⁴/45)/(L/2) · … = 1/12 by symmetry, the mean time itself.
    np.testing.assert_allclose(result.ways_out.mean_conditional_time_s, 1.0 / 12.0, rtol=COARSE)


def test_slab_with_both_ends_partly_open():
    _, result = two_ended_slab(2.0, 5.0)
    wanted = exact.slab_splitting(INSIDE[:, 0], 1.0, 2.0, 5.0)
    np.testing.assert_allclose(result.splitting_at(INSIDE)[0], wanted, rtol=COARSE)
    assert result.mean_time_s == pytest.approx(exact.slab_two_ends_mean(1.0, 2.0, 5.0), rel=COARSE)
    assert result.shares["low"] == pytest.approx(exact.slab_splitting(0.5, 1.0, 2.0, 5.0), rel=COARSE)


@pytest.mark.parametrize(
    ("kappa_in", "kappa_out", "mean", "share"),
    [
        (None, None, exact.SHELL_MEAN_BOTH, exact.SHELL_SHARE_BOTH),
        (1.0, 2.0, exact.SHELL_MEAN_BOTH_ROBIN, exact.SHELL_SHARE_BOTH_ROBIN),
    ],
)
def test_shell_with_both_walls_open(kappa_in, kappa_out, mean, share):
    windows = [labelled(1, "inner", kappa_in), labelled(2, "outer", kappa_out)]
    result = solved_once(shapes.shell(subdivisions=3), windows, ways_out=True)
    assert result.mean_time_s == pytest.approx(mean, rel=COARSE)
    assert result.shares["inner"] == pytest.approx(share, rel=COARSE)
    assert result.ways_out.mean_splitting[0] == pytest.approx(share, rel=COARSE)
    if kappa_in is None:
        points = [[1.5, 0.0, 0.0], [0.0, -1.2, 0.0]]
        np.testing.assert_allclose(
            result.splitting_at(points)[0], exact.shell_splitting(np.array([1.5, 1.2])), rtol=2 * COARSE
        )
        radii = 2.0 - np.array([1.5, 1.2])
        wanted = (1.0 - radii**2) / 6.0  # along the radius as in the slab, seen from the outer wall
        np.testing.assert_allclose(result.conditional_time_at(points)[0], wanted, rtol=2 * COARSE)


def test_focal_disc_of_the_half_oblate_spheroid():
    windows = [labelled(1, "disc"), labelled(2, "dome")]
    surface = shapes.half_oblate_spheroid(48, disc_rings=6, ring_rings=3, dome_rings=10)
    result = solved_once(surface, windows, rim=0, ways_out=True)
    assert result.shares["disc"] == pytest.approx(exact.SPHEROID_SHARE, rel=0.005)
    assert result.ways_out.mean_splitting[0] == pytest.approx(exact.SPHEROID_SHARE, rel=0.005)
    assert -result.conductance_um3_s()[0, 1] == pytest.approx(exact.SPHEROID_CONDUCTANCE, rel=0.005)
    heights = np.array([0.25, 0.5, 0.75])
    on_axis = result.splitting_at(np.column_stack([0.0 * heights, 0.0 * heights, heights]))[0]
    # Near the pole the dome has few flat panels: 0.003 of probability.
    np.testing.assert_allclose(on_axis, exact.spheroid_splitting_on_axis(heights), rtol=0.0, atol=0.003)


def test_two_unequal_caps(caps):
    _, result = caps
    mean, share, conductance = exact.FAR_UNEQUAL_CAPS
    assert result.mean_time_s == pytest.approx(mean, rel=COARSE)
    assert result.shares["small"] == pytest.approx(share, rel=COARSE)
    # Harmonic on a ball: the value at the centre is the volume average.
    assert result.splitting_at([[0.0, 0.0, 0.0]])[0, 0] == pytest.approx(share, rel=COARSE)
    assert -result.conductance_um3_s()[0, 1] == pytest.approx(conductance, rel=COARSE)


def test_probabilities_sum_to_one_and_weighted_times_to_the_time_everywhere(caps):
    _, result = caps
    ways = result.ways_out
    # Each window has a solve of its own, to a residual of 1e-7 in single-precision sums.
    assert ways.sum_error < 1e-4
    np.testing.assert_allclose(ways.panel_splitting.sum(axis=0), 1.0, atol=1e-4)
    summed = ways.panel_weighted_time_s.sum(axis=0)
    np.testing.assert_allclose(summed, result.panel_time_s, atol=1e-3 * result.mean_time_s)
    points = np.array([[0.0, 0.0, 0.0], 0.9 * AXIS, -0.5 * AXIS])
    np.testing.assert_allclose(result.splitting_at(points).sum(axis=0), 1.0, atol=1e-4)


def test_flow_is_reciprocal_and_shares_are_volume_averages(caps):
    _, result = caps
    flow = result.conductance_um3_s()
    # Rows and columns come from different solves.
    assert flow[0, 1] == pytest.approx(flow[1, 0], rel=1e-4)
    np.testing.assert_allclose(flow.sum(axis=1), 0.0, atol=1e-3 * flow[0, 0])
    shares = list(result.shares.values())
    np.testing.assert_allclose(result.ways_out.mean_splitting, shares, atol=1e-3)


def test_one_window_is_the_only_way_out():
    surface = shapes.shell(subdivisions=2)
    result = solved_once(surface, [labelled(1, "inner")], ways_out=True)
    np.testing.assert_array_equal(result.splitting(), 1.0)
    np.testing.assert_allclose(result.ways_out.mean_conditional_time_s, result.mean_time_s, rtol=0.01)


def test_asking_later_gives_what_asking_at_once_gives():
    windows = [labelled(1, "inner"), labelled(2, "outer")]
    result = solved_once(shapes.shell(subdivisions=2), windows, ways_out=True)
    later = replace(result, ways_out=None)
    np.testing.assert_array_equal(later.splitting(), result.splitting())
    only = later.with_ways_out(["outer"]).ways_out
    np.testing.assert_array_equal(only.panel_splitting[0], result.splitting()[1])
    assert only.windows == (1,)
    assert only.sum_error is None


def test_too_many_windows_must_be_named(caps):
    _, result = caps
    many = [replace(result.windows[0], name=f"pore {number}") for number in range(13)]
    with pytest.raises(SettingsError, match=r"13 windows.*limit 12"):
        chosen_windows(many, None)
    assert chosen_windows(many, ["pore 7", "pore 2"]) == (2, 7)
    with pytest.raises(SettingsError, match="no window 'pore 99'"):
        chosen_windows(many, ["pore 99"])


# -- starts ----------------------------------------------------------------------------------------------


def from_start(caps, place):
    surface, result = caps
    return results_from_starts(result, surface, check_starts(surface, {"here": place}))["here"]


def test_a_start_ball_is_the_mean_over_its_points(caps):
    _, result = caps
    centre, radius = 0.35 * AXIS, 0.4
    found = from_start(caps, Ball.at(centre, radius))
    directions = np.random.default_rng(2).normal(size=(3000, 3))
    directions /= np.linalg.norm(directions, axis=1)[:, None]
    # Radii at the middles of equal volumes.
    radii = radius * ((np.arange(3000) + 0.5) / 3000) ** (1.0 / 3.0)
    points = centre + radii[:, None] * directions
    times = result.time_at(points)
    squares = result.time_sd_at(points) ** 2 + times**2
    # Standard errors of 3 000 points: 0.3 % of the mean, 0.5 % of the rest.
    assert found.kind == "ball"
    assert found.mean_time_s == pytest.approx(times.mean(), rel=0.01)
    assert found.mean_time_s**2 + found.escape_time_sd_s**2 == pytest.approx(squares.mean(), rel=0.01)
    splitting = result.splitting_at(points)
    assert found.splitting["small"] == pytest.approx(splitting[0].mean(), rel=0.015)
    weighted = (result.conditional_time_at(points) * splitting).mean(axis=1)
    assert found.splitting["large"] * found.conditional_time_s["large"] == pytest.approx(weighted[1], rel=0.01)


def test_a_start_ball_corrects_the_time_at_its_centre_exactly(caps):
    # Mean over a ball of the solution of D Δu = −1: centre value − r²/(10 D).
    point, ball = from_start(caps, (0.0, 0.0, 0.0)), from_start(caps, Ball.at((0.0, 0.0, 0.0), 0.5))
    assert point.mean_time_s - ball.mean_time_s == pytest.approx(0.025, rel=1e-9)


def test_a_start_patch_is_the_mean_over_its_part_of_the_wall(slab):
    surface, result = slab
    # On the face y = 0 of the slab the time is x(1 − x)/2 and the splitting 1 − x; over a disc of radius r around x:
    # means of x and x² are x and x² + r²/4.
    x, radius = 0.35, 0.2
    patch = Window.disc("patch", centre=(x, 0.0, 0.45), radius=radius)
    found = results_from_starts(result, surface, check_starts(surface, {"patch": patch}))["patch"]
    assert found.kind == "wall patch"
    assert found.mean_time_s == pytest.approx(0.5 * (x - x**2 - radius**2 / 4.0), rel=0.005)
    assert found.splitting["low"] == pytest.approx(1.0 - x, rel=0.005)


def test_a_start_patch_by_labels_is_the_mean_over_its_faces(slab):
    surface, result = slab
    whole = Window.labels("ends and wall", array="label", value=0)
    found = results_from_starts(result, surface, check_starts(surface, {"wall": whole}))["wall"]
    # The four long sides: mean of x(1 − x)/2 is 1/12.
    assert found.mean_time_s == pytest.approx(1.0 / 12.0, rel=0.005)


def test_a_start_patch_by_labels_means_the_same_faces_where_a_lid_cut_the_surface():
    surface = shapes.box(cells=6, label=lambda c: int(c[0] < 1e-9))
    lid = Window.lid("lid", point=(0.5, 0.5, 0.7), normal=(0.0, 0.0, 1.0))
    result = solved_once(surface, [lid], rim=0)
    patch = Window.labels("side", array="label", value=1)
    found = results_from_starts(result, surface, {"side": patch})["side"]
    # A prism of height 0.7 open at its top; its side sees the mean over the height, L²/3.
    assert found.mean_time_s == pytest.approx(exact.prism_mean(0.7), rel=0.005)


@pytest.mark.parametrize(
    ("place", "message"),
    [
        ((2.0, 0.0, 0.0), r"start point 'here' at \(2, 0, 0\) µm lies outside the volume"),
        ((0.0, 0.0), r"start point 'here' is \(0.0, 0.0\); it must be three finite numbers"),
        (
            Ball((0.0, 0.0, 0.9), 0.2),
            r"start ball 'here' has a radius of 200 nm, but the wall is .* nm",
        ),
        (Ball((0.0, 0.0, 3.0), 0.2), r"start ball 'here' at \(0, 0, 3\) µm lies outside"),
        (Window.disc("p", centre=(0.0, 0.0, 0.5), radius=0.1), r"start region 'here' lies .* off the wall"),
        (Window.labels("p", array="compartment", value=1), r"start region 'here' asks for the array 'compartment'"),
    ],
)
def test_a_start_off_its_place_is_refused(caps, place, message):
    surface, _ = caps
    with pytest.raises(SettingsError, match=message):
        check_starts(surface, {"here": place})


def test_a_start_ball_needs_a_place_and_a_length():
    with pytest.raises(SettingsError, match="centre of a start ball"):
        Ball.at((0.0, np.nan, 0.0), 1.0)
    with pytest.raises(SettingsError, match="radius of a start ball is -1"):
        Ball.at((0.0, 0.0, 0.0), -1.0)


# -- the whole call --------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def solved():
    """One resolution of a shell with both walls open, in µm and s with D = 2 µm²/s."""
    windows = [labelled(1, "inner"), labelled(2, "outer")]
    start = {"middle": (1.5, 0.0, 0.0), "cloud": Ball.at((0.0, 1.5, 0.0), "200 nm")}
    return solve_escape(shapes.shell(subdivisions=3), windows, "2 um^2/s", start=start)


def test_errors_stated_for_shares_and_spread_cover_the_true_ones(solved):
    # The mesh itself: shells of 1 280 and 320 faces of the right volumes, 5e-4.
    inner = solved.windows[0]
    assert abs(inner.share - exact.SHELL_SHARE_BOTH) < inner.share_error + 5e-4 * inner.share
    assert inner.share_error < 0.01
    ways = solved.ways_out
    assert abs(ways.mean_splitting[0] - exact.SHELL_SHARE_BOTH) < ways.splitting_error[0] + 5e-4
    assert ways.splitting_error[0] < 0.01


def test_quantities_scale_with_the_diffusion_coefficient(solved):
    middle = solved.start_details["middle"]
    # r = 1.5: u = (r² terms) of the shell with both walls open, D = 2: u = (7 − r² − 6/r)/(6 D).
    assert middle.mean_time_s == pytest.approx((7.0 - 2.25 - 4.0) / 12.0, rel=0.005)
    assert middle.splitting["inner"] == pytest.approx(1.0 / 3.0, rel=0.005)
    assert middle.conditional_time_s["inner"] == pytest.approx((1.0 - 0.25) / 12.0, rel=0.01)
    assert solved.start["middle"] == middle.mean_time_s


def test_the_summary_holds_spread_and_ways_out(solved):
    summary = solved.summary
    assert summary.escape_time_sd_s == solved.spread.sd_s
    assert summary.spread.exponential_within == pytest.approx(1.0 - 2.0 / (1.0 + solved.spread.cv**2))
    assert summary.windows[0].conditional_time_s == pytest.approx(solved.ways_out.mean_conditional_time_s[0])
    assert summary.start_details["cloud"].kind == "ball"
    assert summary.checks.splitting_sum < 1e-3
    assert summary.checks.splitting_share < 5e-3


def test_spread_ways_out_and_starts_come_back_from_disk(solved, tmp_path):
    loaded = load_result(save_result(solved, tmp_path / "out", pictures=False))
    np.testing.assert_array_equal(loaded.spread.panel_second_moment_s2, solved.spread.panel_second_moment_s2)
    assert loaded.spread.cv == solved.spread.cv
    assert loaded.ways_out.windows == (0, 1)
    np.testing.assert_array_equal(loaded.splitting(), solved.splitting())
    np.testing.assert_array_equal(loaded.ways_out.mean_splitting, solved.ways_out.mean_splitting)
    assert loaded.start_details == solved.start_details
    assert loaded.summary == solved.summary
    point = [[0.0, 0.0, 1.3]]
    np.testing.assert_array_equal(loaded.conditional_time_at(point), solved.conditional_time_at(point))
    np.testing.assert_array_equal(loaded.time_sd_at(point), solved.time_sd_at(point))


def test_an_unknown_window_is_refused_before_anything_is_solved():
    surface = shapes.shell(subdivisions=2)
    with pytest.raises(SettingsError, match="ways_out names the window 'middle'"):
        solve_escape(surface, [labelled(1, "inner")], 1.0, ways_out=["middle"], settings=SolverSettings(max_panels=100))
