"""The fast sums against direct ones in double precision, set by set and kernel by kernel."""

import subprocess
import sys

import fmm_sets
import numpy as np
import pytest

import shapes
from bemescape.bem import far
from bemescape.bem.far import Targets, panel_targets, point_targets
from bemescape.bem.fmm import FastSums, harmonics, kept, near, passes
from bemescape.bem.panels import make_panels
from bemescape.errors import SettingsError
from bemescape.threads import use_threads
from bemescape.windows.grade import Fineness, graded, place_windows
from bemescape.windows.window import Window

DIRECT = {"single": far.single_layer, "double": far.double_layer, "lifted": far.lifted_single_layer}


def some_of(at, count=150):
    pick = np.random.default_rng(3).choice(len(at.points), count, replace=False)
    return pick, Targets(at.points[pick], at.normals[pick], at.spread[pick])


@pytest.fixture(scope="module")
def graded_mesh():
    """A ball with a small disc window: panels that differ by a factor of 80 in size, joined as in a real case."""
    ball = shapes.ball(3)
    window = Window.disc("cap", centre=shapes.on_ball(ball, (0.3, 0.5, 0.8)), radius=0.15)
    mesh = graded(place_windows(ball, [window]), Fineness(32.0, 6, 4000.0))
    panels = make_panels(mesh.vertices[mesh.faces])
    return panels, fmm_sets.density_on(panels, np.random.default_rng(5))


@pytest.fixture(scope="module", params=list(fmm_sets.SETS))
def case(request):
    panels = fmm_sets.panels_of(request.param)
    density = fmm_sets.density_on(panels, np.random.default_rng(1))
    pick, at = some_of(panel_targets(panels))
    every = np.arange(len(panels))
    exact = {kind: fmm_sets.direct(kind, at, panels, every, density) for kind in DIRECT}
    return panels, density, pick, exact


@pytest.mark.parametrize("tolerance", [1e-4, 1e-5, 1e-6])
def test_sums_over_every_set_keep_the_tolerance(case, tolerance):
    panels, density, pick, exact = case
    sums = FastSums(panels, tolerance=tolerance)
    every = np.arange(len(panels))
    # Dipoles set the tolerance; below some 8e-6 (graded set) single precision does, as in the direct loop. Charges lose
    # no digits to cancellation. The lifted sum is a difference of charges times distances across the set.
    assert fmm_sets.relative(sums.double(every, density)[pick], exact["double"]) < max(tolerance, 9e-6) * (
        2.0 if tolerance == 1e-3 else 1.0
    )
    assert fmm_sets.relative(sums.single(every, density)[pick], exact["single"]) < max(0.2 * tolerance, 2e-6)
    assert fmm_sets.relative(sums.lifted(every, density)[pick], exact["lifted"]) < max(0.3 * tolerance, 3e-6)


def test_rough_sums_for_preconditioners_keep_four_thousandths(case):
    panels, density, pick, exact = case
    every = np.arange(len(panels))
    rough = FastSums(panels, tolerance=1e-3).double(every, density)
    assert fmm_sets.relative(rough[pick], exact["double"]) < 4e-3  # measured: 3.4e-3 at most


@pytest.mark.parametrize("kind", list(DIRECT))
def test_sums_on_a_graded_mesh_equal_the_direct_loop(graded_mesh, kind):
    panels, density = graded_mesh
    every = np.arange(len(panels))
    fast = getattr(FastSums(panels, tolerance=1e-5), kind)(every, density)
    direct = DIRECT[kind](panel_targets(panels), panels, every, density)
    pick, at = some_of(panel_targets(panels), 400)
    exact = fmm_sets.direct(kind, at, panels, every, density)
    # The softening of the direct kernels is of fourth order in size over distance, and absent from expansions: 6.3e-5
    # for dipoles, a tenth of that for charges, at any tolerance. The direct loop itself rounds to 2e-4 for dipoles.
    assert fmm_sets.relative(fast[pick], exact) < (1e-4 if kind == "double" else 2e-5)
    assert fmm_sets.relative(fast, direct) < (3e-4 if kind == "double" else 2e-5)


@pytest.mark.parametrize("kind", list(DIRECT))
def test_a_few_sources_get_a_tree_of_their_own_with_the_same_sums(case, kind):
    panels, density, _, _ = case
    pick, at = some_of(panel_targets(panels))
    sums = FastSums(panels, tolerance=1e-5)
    for used in (np.arange(0, len(panels), 3), np.arange(17), np.array([], dtype=np.int64)):
        fast = getattr(sums, kind)(used, density[used])
        exact = fmm_sets.direct(kind, at, panels, used, density[used])
        # The scale is that of the whole sum; of few sources some targets see little.
        np.testing.assert_allclose(fast[pick], exact, rtol=0, atol=2e-5 * max(np.abs(exact).max(), 1e-300))


@pytest.mark.parametrize("kind", list(DIRECT))
def test_sums_at_points_inside_and_far_outside(graded_mesh, kind):
    panels, density = graded_mesh
    every = np.arange(len(panels))
    points = np.random.default_rng(2).uniform(-0.55, 0.55, size=(400, 3))
    points[:3] = [[4.0, 1.0, 0.0], [-30.0, 2.0, 5.0], [0.0, 0.0, 0.0]]
    got = getattr(FastSums(panels, tolerance=1e-5).at_points(points), kind)(every, density)
    exact = fmm_sets.direct(kind, point_targets(points), panels, every, density)
    assert fmm_sets.relative(got, exact) < 1e-5


def test_many_densities_at_once_equal_them_one_by_one(graded_mesh):
    panels, density = graded_mesh
    every = np.arange(len(panels))
    # Indicators of 40 clusters of neighbours (more than fit at once), a full column, and one of zeros.
    densities = np.zeros((len(panels), 42))
    densities[every, every * 40 // len(panels)] = 1.0
    densities[:, 40] = density
    sums = FastSums(panels, tolerance=1e-5)
    got = sums.double_many(every, densities)
    assert not got[:, 41].any()
    for column in (0, 7, 39, 40):
        one = sums.double(every, densities[:, column])
        # Same expansions; only the order of single-precision sums differs.
        np.testing.assert_allclose(got[:, column], one, rtol=0, atol=2e-6 * np.abs(one).max())


def test_results_are_the_same_to_the_last_bit_whatever_the_threads(graded_mesh):
    panels, density = graded_mesh
    every = np.arange(len(panels))
    densities = np.column_stack([density, density**2])
    found = []
    for count in (1, 2, 5):
        with use_threads(count):
            sums = FastSums(panels)
            found.append(
                [getattr(sums, kind)(every, density).tobytes() for kind in DIRECT]
                + [sums.double_many(every, densities).tobytes()]
            )
    assert found[0] == found[1] == found[2]


def test_panels_too_large_for_their_box_are_summed_directly():
    rng = np.random.default_rng(8)
    fine = fmm_sets.volume(4000, rng)
    centre = np.full((3, 3), 0.5)
    large = fmm_sets.small_triangles(centre + 0.01 * rng.normal(size=(3, 3)), np.eye(3), np.full(3, 0.4), rng)
    panels = make_panels(np.concatenate([fine, large]))
    every, is_large = np.arange(len(panels)), panels.radii > 0.1
    sums = FastSums(panels, tolerance=1e-5)
    # As targets only, then as sources only, so that either way shows alone.
    density = np.where(is_large, 0.0, fmm_sets.density_on(panels, rng))
    exact = fmm_sets.direct("double", panel_targets(panels), panels, every, density)[is_large]
    got = sums.double(every, density)[is_large]
    np.testing.assert_allclose(got, exact, rtol=0, atol=1e-5 * np.abs(exact).max())
    density = is_large.astype(float)
    exact = fmm_sets.direct("double", panel_targets(panels), panels, every, density)
    assert fmm_sets.relative(sums.double(every, density), exact) < 1e-5
    densities = np.column_stack([density, 1.0 - density])
    assert fmm_sets.relative(sums.double_many(every, densities)[:, 0], exact) < 1e-5


def test_a_handful_of_panels_and_coincident_ones_are_no_trouble():
    corners = np.repeat(np.array([[[0.0, 0, 0], [1, 0, 0], [0, 1, 0]]]), 300, axis=0)
    for panels in (make_panels(corners[:1]), make_panels(corners)):
        every = np.arange(len(panels))
        density = np.ones(len(panels))
        for kind in DIRECT:
            exact = fmm_sets.direct(kind, panel_targets(panels), panels, every, density)
            np.testing.assert_allclose(getattr(FastSums(panels), kind)(every, density), exact, rtol=1e-5, atol=1e-12)


@pytest.mark.parametrize("tolerance", [1e-7, 0.0, -1.0, float("nan")])
def test_a_tolerance_beyond_single_precision_is_refused_with_its_value(graded_mesh, tolerance):
    with pytest.raises(SettingsError, match=f"{tolerance:g} is below 1e-06"):
        FastSums(graded_mesh[0], tolerance=tolerance)


def test_importing_compiles_nothing():
    ask = (
        "from bemescape.bem.fmm import kept, near, passes, tree\n"
        "held = [f for m in (kept, near, passes, tree) for f in (*vars(m).values(), *kept.FILLS.values())]\n"
        "compiled = [f for f in held if getattr(f, 'signatures', None)]\n"
        "print(len(compiled))"
    )
    answer = subprocess.run([sys.executable, "-c", ask], capture_output=True, text=True, check=True, timeout=100)
    assert answer.stdout.strip() == "0"


def test_compiled_loops_can_be_found_again_in_the_cache_on_disk():
    # numba keys the cache of a closure by its cells; compiled functions among them differ from process to process, and
    # every process would then compile for a minute.
    modules = (harmonics, kept, near, passes)
    held = [value for module in modules for value in (*vars(module).values(), *kept.FILLS.values())]
    loops = [f for f in held if hasattr(f, "py_func")]
    assert len(loops) > 15
    cells = [cell.cell_contents for f in loops for cell in f.py_func.__closure__ or ()]
    assert cells
    assert all(isinstance(held, (int, bool)) for held in cells)
