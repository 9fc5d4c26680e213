"""Harmonics and translations against what they stand for: 1/|x − y|; and the cache of translations on disk."""

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest

from bemescape.bem.fmm import operators
from bemescape.bem.fmm.harmonics import (
    BLOCK,
    SERIES,
    coefficient_count,
    dipole_irregular,
    dipole_regular,
    irregular,
    regular,
    steps,
)
from bemescape.bem.fmm.operators import load_operators, make_operators
from bemescape.bem.fmm.tree import FAR_OFFSETS
from bemescape.bem.kernels import spread_dipole

DEGREE = 12
CORNERS = np.array([[k & 1, (k >> 1) & 1, k >> 2] for k in range(8)]) - 0.5


@pytest.fixture
def cache(tmp_path, monkeypatch):
    folder = tmp_path / "cache"
    monkeypatch.setattr(operators, "user_cache_dir", lambda _name: str(folder))
    return folder


def same(a, b):
    return all(np.array_equal(getattr(a, name), getattr(b, name)) for name in ("to_parent", "to_child", "far"))


def test_regular_times_irregular_harmonics_sum_to_the_inverse_distance():
    rng = np.random.default_rng(0)
    y, x = rng.uniform(-0.3, 0.3, (20, 3)), rng.normal(size=(20, 3))
    x *= 3.0 / np.linalg.norm(x, axis=1, keepdims=True)
    total = (regular(y, 40) * irregular(x, 40)).sum(axis=1)
    # (0.52/3)^41 is far below rounding.
    np.testing.assert_allclose(total, 1.0 / np.linalg.norm(x - y, axis=1), rtol=1e-13)


@pytest.mark.parametrize(("near", "far"), [(dipole_regular, irregular), (dipole_irregular, regular)])
def test_dipole_moments_of_panels_give_the_kernel_of_the_direct_loop(near, far):
    """Also a check of the third derivative along the normal, which the spread of a dipole needs."""
    rng = np.random.default_rng(1)
    centre = rng.uniform(-0.3, 0.3, (BLOCK, 3)) + (np.array([0.0, 3.0, 0.0]) if near is dipole_irregular else 0.0)
    normals = rng.normal(size=(BLOCK, 3))
    normals /= np.linalg.norm(normals, axis=1, keepdims=True)
    wide = np.full(BLOCK, 1e-3)
    out = np.zeros((1, coefficient_count(20), BLOCK), np.float32)
    near(
        np.vstack([centre.T, normals.T, wide]).astype(np.float32), 20, steps(20).astype(np.float32),
        np.zeros((SERIES, 4, BLOCK), np.float32), np.zeros((43, 4, BLOCK), np.float32), out,
    )  # fmt: skip
    target = np.array([0.1, -0.2, 0.1]) + (np.array([0.0, 3.0, 0.0]) if near is dipole_regular else 0.0)
    got = far(target[None], 20)[0] @ out[0]
    d = target - centre
    hs = (d * normals).sum(axis=1)
    exact = spread_dipole.py_func(0.0, hs, 0.0, 0.0, wide, 1.0 / np.sqrt((d**2).sum(axis=1) + wide))
    # Single precision; the direct kernel is softened, which differs by (1e-3/9)² of the value.
    np.testing.assert_allclose(got, exact, rtol=0, atol=2e-6 * np.abs(exact).max())


@pytest.mark.parametrize("offset", [(2, 0, 0), (-2, 1, 0), (3, -3, 3), (-1, -1, -2)])
def test_up_across_and_down_the_tree_arrives_the_potential_of_the_charges(offset):
    o = make_operators(DEGREE, 1e-6)
    rng = np.random.default_rng(2)
    charges, sources, targets = rng.uniform(size=50), rng.uniform(-0.5, 0.5, (50, 3)), rng.uniform(-0.5, 0.5, (50, 3))
    number = int(np.flatnonzero((offset == FAR_OFFSETS).all(axis=1))[0])
    k = coefficient_count(int(o.far_degree[number]))
    matrix = o.far[o.far_first[number] : o.far_first[number + 1]].reshape(k, k)
    for up, down in ((0, 7), (5, 2)):
        multipole = charges @ regular(sources, DEGREE) @ o.to_parent[up]
        local = np.zeros(coefficient_count(DEGREE))
        local[:k] = multipole[:k] @ matrix
        got = regular(targets, DEGREE) @ (local @ o.to_child[down])
        # The parents' sides are twice the children's.
        shift = 2.0 * np.array(offset) + CORNERS[down] - CORNERS[up]
        exact = (charges / np.linalg.norm(targets[:, None] + shift - sources, axis=2)).sum(axis=1)
        # Root mean square, as the tolerance is; single points near a corner may be several times worse.
        assert np.sqrt(np.mean((got / exact - 1.0) ** 2)) < 3e-6


def test_translations_are_kept_and_read_back(cache, monkeypatch):
    made = load_operators(4, 1e-3)
    assert [f.suffix for f in cache.iterdir()] == [".npz"]
    monkeypatch.setattr(operators, "make_operators", lambda *_: pytest.fail("computed again"))
    assert same(load_operators(4, 1e-3), made)


@pytest.mark.parametrize("damage", ["empty", "cut", "noise", "wrong shapes", "not finite"])
def test_a_damaged_file_is_computed_anew_and_replaced(cache, damage):
    made = load_operators(4, 1e-3)
    (file,) = cache.iterdir()
    whole = file.read_bytes()
    if damage == "empty":
        file.write_bytes(b"")
    elif damage == "cut":
        file.write_bytes(whole[: len(whole) // 2])
    elif damage == "noise":
        file.write_bytes(b"\x93" * 5000)
    else:
        with np.load(file) as stored:
            arrays = dict(stored)
        if damage == "wrong shapes":
            arrays["far_degree"] = arrays["far_degree"] + 1
        else:
            arrays["far"][5] = np.nan
        np.savez(file, **arrays)
    assert same(load_operators(4, 1e-3), made)
    assert file.read_bytes()[:2] == b"PK"
    assert operators._read(file, 4) is not None


def test_several_at_once_write_one_whole_file(cache):
    with ThreadPoolExecutor(4) as pool:
        found = list(pool.map(lambda _: load_operators(4, 1e-3), range(8)))
    assert all(same(f, found[0]) for f in found)
    assert [f.suffix for f in cache.iterdir()] == [".npz"]


def test_no_room_for_the_cache_costs_only_the_computation(tmp_path, monkeypatch):
    blocked = tmp_path / "file"
    blocked.write_text("a file where the folder should be")
    monkeypatch.setattr(operators, "user_cache_dir", lambda _name: str(blocked / "below"))
    assert same(load_operators(4, 1e-3), make_operators(4, 1e-3))
