"""Compact pores: windows with one unknown each and no panels, against series, expansions and meshed windows."""

import json
import math

import numpy as np
import pytest
from one_mesh import solved_once

import bemescape as be
import exact
import shapes
from bemescape import EscapeResult, SettingsError, Surface, Window, WindowError, solve_escape
from bemescape.windows.placement import MESHED_UNASKED, place_windows

AXIS = np.array([0.3, 0.5, 0.81]) / np.linalg.norm([0.3, 0.5, 0.81])
TURN = np.linalg.qr(np.random.default_rng(7).standard_normal((3, 3)))[0]
OCTAHEDRON = np.concatenate([np.eye(3), -np.eye(3)]) @ TURN.T


def chord(eps):
    return 2.0 * np.sin(eps / 2.0)


def caps(directions, eps, name="cap", **options):
    return Window.points(name, positions=directions, radius=chord(eps), compact=True, farthest=0.2, **options)


@pytest.fixture(scope="module")
def ball():
    return shapes.ball(3)


@pytest.fixture(scope="module")
def ovoid():
    """An ellipsoid: no two places bend alike, and the two principal curvatures differ."""
    return Surface(shapes.ball(3).vertices * [0.8, 1.0, 1.3], shapes.ball(3).faces)


@pytest.mark.parametrize("eps", [0.05, 0.1])
def test_one_small_cap_on_the_ball_and_what_curvature_adds_to_it(ball, eps):
    window = caps(AXIS[None], eps)
    with_it = solved_once(ball, [window], spread=False)
    # 1 280 flat faces in place of the ball; the two-term expansion itself is off by 2e-4 and 7.5e-4.
    assert with_it.mean_time_s == pytest.approx(exact.CAP_MEAN[eps], rel=2e-3)
    # One corner of twenty faces is as bad a place for a smooth wall as there is: a fifth of the curvature's part.
    flat = solved_once(ball, [window], spread=False, resistance_of=lambda rows: rows.resistance - rows.curvature_part)
    assert abs(flat.mean_time_s / exact.CAP_MEAN[eps] - 1.0) > (0.01 if eps == 0.05 else 2e-3)


def test_the_smooth_wall_s_logarithm_does_not_depend_on_the_mesh():
    """(a/πR) ln(R/a) of the resistance, whatever the panels resolve of it: on flat panels alone it would."""
    errors = [
        solved_once(shapes.ball(level), [caps(AXIS[None], 0.05)], spread=False).mean_time_s / exact.CAP_MEAN[0.05] - 1.0
        for level in (2, 3)
    ]
    # Without the curvature's part they would be off by 2.5 % and 1.7 %.
    np.testing.assert_allclose(errors, 0.0, atol=2e-3)


def test_a_cap_on_a_concave_wall():
    """On the inner shell the wall bends away from the volume: the logarithm has the other sign."""
    surface = shapes.shell(inner=1.0, outer=2.0, subdivisions=4)
    inner = surface.faces[surface.face_data["label"] == 1]
    middles = surface.vertices[inner].mean(axis=1)
    place = middles[(middles @ AXIS).argmax()]
    window = Window.disc("target", centre=place, radius=chord(0.1), compact=True)
    placed = place_windows(surface, [window]).pores
    assert placed.curvature[0] == pytest.approx(-1.0, rel=0.03)
    result = solved_once(surface, [window], spread=False)
    assert result.mean_time_s == pytest.approx(exact.cap_on_inner_shell_mean(2.0), rel=5e-3)


@pytest.mark.parametrize("eps", [0.02, 0.05, 0.1])
def test_fifty_caps_are_as_good_as_the_matrix_form(ball, eps):
    result = solved_once(ball, [caps(shapes.fibonacci(50), eps)], spread=False)
    by_matrix, true = exact.caps_by_matrix(shapes.fibonacci(50), eps), exact.FIBONACCI_CAPS_50[eps]
    own_error = abs(by_matrix / true - 1.0)
    assert abs(result.mean_time_s / by_matrix - 1.0) < 0.01 + own_error
    # 1e-3 for the faces; at 0.1, where 12 % of the wall is open, the finite size of neighbours is in it too.
    assert abs(result.mean_time_s / true - 1.0) < max(own_error, 1e-3)
    assert sum(result.shares.values()) == pytest.approx(1.0, abs=1e-4)


def test_caps_at_the_corners_of_an_octahedron_share_alike(ball):
    result = solved_once(ball, [caps(OCTAHEDRON, 0.05)], spread=False)
    assert result.mean_time_s == pytest.approx(exact.OCTAHEDRON_CAPS_005, rel=2e-3)
    np.testing.assert_allclose(list(result.shares.values()), 1 / 6, rtol=5e-3)  # the faces under them differ


def test_a_partly_open_cap(ball):
    result = solved_once(ball, [caps(AXIS[None], 0.1, permeability=10.0)], spread=False)
    assert result.mean_time_s == pytest.approx(exact.ROBIN_CAP_MEAN[0.1, 10.0], rel=2e-3)
    # Two resistances in series would be 2 % lower: the factor is the disc's own.
    in_series = exact.CAP_MEAN[0.1] + exact.BALL_VOLUME / (10.0 * exact.CAP_AREA[0.1])
    assert result.mean_time_s / in_series - 1.0 > 0.02


@pytest.mark.parametrize("permeability", [None, 15.0])
def test_compact_and_meshed_pores_agree(ovoid, permeability):
    places = np.array([shapes.on_ball(ovoid, d) for d in ((1, 0.2, 0.3), (-0.2, 0.3, 1), (-1, 1, -0.4))])
    results = [
        solved_once(
            ovoid,
            [Window.points("p", positions=places, radius=0.08, permeability=permeability, compact=compact)],
            spread=False,
            wall=1,
        )
        for compact in (True, False)
    ]
    assert results[0].pores is not None
    assert results[1].pores is None
    assert results[0].mean_time_s == pytest.approx(results[1].mean_time_s, rel=0.01)
    np.testing.assert_allclose(list(results[0].shares.values()), list(results[1].shares.values()), rtol=0.01)


@pytest.fixture(scope="module")
def mixed(ball):
    """Antipodal caps of half-angles 0.1, compact, and 0.2, with panels."""
    small = caps(AXIS[None], 0.1, name="small")
    large = Window.disc("large", centre=shapes.on_ball(ball, -AXIS), radius=chord(0.2))
    return solved_once(ball, [small, large], ways_out=True)


def test_compact_and_meshed_windows_mix(mixed):
    assert (mixed.panel_window == 1).any()
    assert not (mixed.panel_window == 0).any()
    assert mixed.mean_time_s == pytest.approx(exact.UNEQUAL_CAPS_MEAN, rel=5e-3)
    assert mixed.windows[0].share == pytest.approx(exact.UNEQUAL_CAPS_SHARE, rel=5e-3)
    assert abs(mixed.balance) < 1e-3


def test_splitting_probabilities_with_a_compact_pore(mixed):
    ways = mixed.ways_out
    assert ways.sum_error < 1e-4
    shares = [window.share for window in mixed.windows]
    np.testing.assert_allclose(ways.mean_splitting, shares, atol=1e-3)
    conductance = mixed.conductance_um3_s()
    assert conductance[0, 1] == pytest.approx(conductance[1, 0], rel=5e-3)
    assert -conductance[0, 1] == pytest.approx(exact.UNEQUAL_CAPS_CONDUCTANCE, rel=0.01)
    # Those who leave by either, weighted, take the mean time.
    total = ways.mean_weighted_time_s.sum()
    assert total == pytest.approx(mixed.mean_time_s, rel=2e-3)


@pytest.fixture(scope="module")
def one_cap(ball):
    return solved_once(ball, [caps(AXIS[None], 0.1)])


def test_spread_of_the_time_through_a_compact_pore(one_cap):
    assert one_cap.spread.cv**2 == pytest.approx(exact.CAP_CV2[0.1], abs=2e-3)
    assert abs(one_cap.spread.balance) < 1e-3


def test_times_inside_and_close_to_a_compact_pore(one_cap):
    """Within a panel's size of the pore the panels' averages would be off by a quarter of the time."""
    heights = [0.9, 0.5, -0.5]
    times = one_cap.time_at([z * AXIS for z in heights])
    np.testing.assert_allclose(times, [exact.CAP_AXIS_01[z] for z in heights], rtol=0.03)
    # R²/10D; 3e-4 of the time is what the balance of 1 280 panels is off by.
    assert one_cap.time_at([0.0, 0.0, 0.0])[0] - one_cap.mean_time_s == pytest.approx(0.1, abs=5e-3)


def test_panels_smaller_than_the_pore_show_no_time_below_zero():
    surface = shapes.ball(4)
    result = solved_once(surface, [caps(AXIS[None], 0.2)], spread=False)
    assert result.panel_time_s.min() >= 0.0
    close = np.linalg.norm(result.panel_centroids - result.pores.centre_um[0], axis=1) < 0.1
    assert result.panel_time_s[close].max() < 0.1 * result.mean_time_s  # on the pore


@pytest.fixture(scope="module")
def solved():
    ball = shapes.ball(2)
    windows = [caps(OCTAHEDRON[:3], 0.06, name="pore"), Window.disc("neck", centre=tuple(-AXIS), radius=0.3)]
    return solve_escape(ball, windows, "2 um^2/s", target=0.05, ways_out=["neck", "pore[2]"])


def test_a_solve_states_errors_that_hold_what_pores_leave_out(ball, solved):
    assert any("3 round windows are solved as compact pores" in note for note in solved.notes)
    assert [window.compact for window in solved.summary.windows] == [True] * 3 + [False]
    placed = place_windows(ball, [caps(OCTAHEDRON[:3], 0.06)]).pores
    assert placed.resistance_error.min() > 0.0
    assert all(window.share_error > 0.0 for window in solved.windows)
    fifty = solve_escape(ball, [caps(shapes.fibonacci(50), 0.1)], 1.0)
    assert abs(fifty.mean_time_s / exact.FIBONACCI_CAPS_50[0.1] - 1.0) <= fifty.relative_error
    assert not fifty.target_met
    assert any("is what compact pores leave out, which no refinement lowers" in note for note in fifty.notes)


def test_a_prepared_surface_follows_the_permeability_and_d_of_compact_pores():
    surface, place = shapes.ball(2), AXIS[None]
    prepared = be.prepare(surface)
    first = prepared.solve([caps(place, 0.1)], 1.0, target=0.1)
    scaled = prepared.solve([caps(place, 0.1)], 4.0, target=0.1)
    assert scaled.mean_time_s == pytest.approx(first.mean_time_s / 4.0, rel=1e-12)
    point = [[0.1, 0.2, 0.3]]
    np.testing.assert_allclose(scaled.time_at(point), first.time_at(point) / 4.0, rtol=1e-12)
    np.testing.assert_allclose(scaled.time_sd_at(point), first.time_sd_at(point) / 4.0, rtol=1e-9)
    partly = [caps(place, 0.1, permeability=10.0)]
    again = prepared.solve(partly, 1.0, target=0.1)
    assert again.levels[-1]["kept_rows"] == 1.0
    assert again.mean_time_s == pytest.approx(solve_escape(surface, partly, 1.0, target=0.1).mean_time_s, rel=1e-4)
    assert again.mean_time_s > 2.0 * first.mean_time_s


def test_slow_regions_lead_to_compact_pores(ball):
    result = solved_once(ball, [caps(AXIS[None], 0.05, name="pore")], spread=False)
    region = result.slow_regions().regions[0]
    assert region.nearest_window == "pore[1]"
    # Half way around; edge paths are a few per cent longer.
    assert region.distance_to_window_um == pytest.approx(np.pi, rel=0.15)
    np.testing.assert_allclose(region.path_um[-1], result.pores.centre_um[0])


def test_what_is_saved_comes_back(solved, tmp_path):
    solved.save(tmp_path / "out", pictures=False)
    back = EscapeResult.load(tmp_path / "out")
    for name in ("window", "panel", "centre_um", "normal", "radius_um", "curvature_per_um", "reach_um"):
        np.testing.assert_array_equal(getattr(back.pores, name), getattr(solved.pores, name))
    np.testing.assert_array_equal(back.spread.pore_second_outflow, solved.spread.pore_second_outflow)
    points = [[0.1, 0.2, 0.3], 0.95 * OCTAHEDRON[0]]
    np.testing.assert_array_equal(back.time_at(points), solved.time_at(points))
    np.testing.assert_array_equal(back.time_sd_at(points), solved.time_sd_at(points))
    np.testing.assert_array_equal(back.splitting_at(points), solved.splitting_at(points))
    again = back.with_ways_out(["pore[2]"])
    np.testing.assert_allclose(again.ways_out.mean_splitting[0], solved.ways_out.mean_splitting[0], rtol=1e-4)


@pytest.mark.parametrize(("key", "values"), [("panel", [0, 1, 10**6]), ("radius_um", [1.0, 0.0, 1.0])])
def test_pores_that_point_nowhere_are_refused_on_loading(solved, tmp_path, key, values):
    solved.save(tmp_path, pictures=False)
    with np.load(tmp_path / "result.npz") as archive:
        arrays = dict(archive)
    header = json.loads(bytes(arrays["header_json"]))
    header["pores"][key] = values
    arrays["header_json"] = np.frombuffer(json.dumps(header).encode(), np.uint8)
    np.savez(tmp_path / "result.npz", **arrays)
    with pytest.raises(SettingsError, match=rf"result\.npz is damaged or not ours \(pores\.{key}"):
        EscapeResult.load(tmp_path)


# -- which windows become compact pores ------------------------------------------------------------------------------


def compact_names(placement):
    if placement.pores is None:
        return []
    return [placement.windows[number].name for number in placement.pores.number]


def test_many_small_pores_become_compact_unasked_and_few_do_not(ball):
    many = MESHED_UNASKED + 1
    assert len(compact_names(place_windows(ball, [Window.scatter("pore", count=many, radius=0.01)]))) == many
    assert compact_names(place_windows(ball, [Window.scatter("pore", count=many - 1, radius=0.01)])) == []
    asked = Window.scatter("pore", count=many, radius=0.01, compact=False)
    assert compact_names(place_windows(ball, [asked])) == []
    # A smaller budget leaves panels for fewer rims.
    assert len(compact_names(place_windows(ball, [Window.scatter("p", count=9, radius=0.01)], most_meshed=8))) == 9


def test_large_or_crowded_pores_keep_their_panels(ball):
    apart = np.concatenate([shapes.fibonacci(60), [shapes.fibonacci(60)[0] + [0.03, 0.03, -0.02]]])
    placement = place_windows(ball, [Window.points("pore", positions=apart, radius=0.02, farthest=0.2)])
    assert sorted(set(range(61)) - set(placement.pores.number.tolist())) == [0, 60]
    assert len(placement.patches) == 2
    coarse = shapes.box(cells=1)
    near_edge = [(0.5, 0.02, 0.0), (0.5, 0.5, 0.0)]
    placement = place_windows(coarse, [Window.points("pore", positions=near_edge, radius=0.01)], most_meshed=1)
    assert compact_names(placement) == ["pore[2]"]


def test_the_wall_s_curvature_is_found(ball):
    placed = place_windows(ball, [caps(shapes.fibonacci(50), 0.02)]).pores
    np.testing.assert_allclose(placed.curvature, 1.0, rtol=0.02)
    box = place_windows(shapes.box(cells=4), [Window.disc("p", centre=(0.3, 0.4, 0.0), radius=0.01, compact=True)])
    assert box.pores.curvature[0] == 0.0
    tube = shapes.cylinder_with_strip(around=96, cells=24)
    placed = place_windows(tube, [Window.disc("p", centre=(1.0, 0.02, 0.51), radius=0.01, compact=True)]).pores
    assert placed.curvature[0] == pytest.approx(0.5, rel=0.1)  # (1 + 0)/2, smoothed


@pytest.mark.parametrize(
    ("windows", "told"),
    [
        (
            [caps(np.array([AXIS, AXIS + np.array([0.02, 0, 0])]), 0.05)],
            r"'cap\[1\]' and 'cap\[2\]' overlap: they are .* apart",
        ),
        ([caps(np.array([AXIS, AXIS]), 0.05)], r"'cap\[1\]' and 'cap\[2\]' are the same position"),
        (
            [caps(AXIS[None], 0.05), caps((AXIS + np.array([0.03, 0, 0]))[None], 0.02, name="dot")],
            r"windows 'cap\[1\]' and 'dot\[1\]' overlap near",
        ),
        (
            [caps(AXIS[None], 0.05), Window.disc("neck", centre=tuple(AXIS), radius=0.3)],
            r"windows 'neck' and 'cap\[1\]' overlap near",
        ),
        ([caps(AXIS[None], 0.55)], r"radius of 543 nm where the wall bends with a radius .* compact = false"),
        ([Window.disc("p", centre=(0, 0, 0), radius=0.1, compact=True)], r"'p' lies .* off the wall \(limit 50 nm"),
        ([Window.disc("p", centre=(0, 0, 1), radius=1e-6, compact=True)], r"radius of 0\.001 nm, below 1e-05"),
        ([Window.scatter("p", count=100_000, radius=1e-4)], r"brings the pores to 100000 \(limit 20000"),
    ],
)  # fmt: skip
def test_what_cannot_be_a_compact_pore_is_refused_in_a_sentence(ball, windows, told):
    with pytest.raises(WindowError, match=told):
        place_windows(ball, windows)


def test_a_sharp_edge_within_a_compact_pore_is_refused():
    window = Window.disc("p", centre=(0.5, 0.01, 0.0), radius=0.05, compact=True)
    with pytest.raises(
        WindowError, match=r"'p' has a radius of 50 nm and a sharp edge of the wall 10 nm from its middle"
    ):
        place_windows(shapes.box(cells=4), [window])


def test_only_round_windows_are_compact():
    surface = shapes.box(cells=2, label=lambda c: int(c[2] < 1e-9))
    window = Window("floor", Window.labels("floor", array="label", value=1).shape, math.inf, True)
    with pytest.raises(WindowError, match="'floor' is of the kind labels, and only round windows"):
        place_windows(surface, [window])
    with pytest.raises(SettingsError, match="compact of window 'p' is 'yes'; it must be True, False or None"):
        Window.disc("p", centre=(0, 0, 0), radius=1.0, compact="yes")


@pytest.mark.slow
def test_three_thousand_pores_on_a_nucleus_of_twenty_thousand_faces():
    surface = shapes.ball(5, radius=5.0)
    result = solve_escape(surface, [Window.scatter("pore", count=3000, radius="25 nm", gap="50 nm", seed=1)], 20.0)
    assert result.target_met
    assert sum(result.shares.values()) == pytest.approx(1.0, abs=1e-4)
    # The matrix form for the same pores, scaled to R = 1; its own error falls with the radius, eps = 0.005.
    centres = result.pores.centre_um
    unit = centres / np.linalg.norm(centres, axis=1)[:, None]
    expected = exact.caps_by_matrix(unit, 0.005) * 25.0 / 20.0
    assert result.mean_time_s == pytest.approx(expected, rel=result.relative_error + 5e-4)
