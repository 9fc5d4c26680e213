"""Saving and loading: what comes back, what a crash leaves, and what is refused."""

import json
import math
import zipfile
from dataclasses import fields
from types import SimpleNamespace

import jsonschema
import numpy as np
import pytest
import pyvista
import trimesh

from bemescape.errors import SettingsError
from bemescape.escape import solve_escape
from bemescape.results import store
from bemescape.results.measures import summarise
from bemescape.results.result import EscapeResult, WindowResult
from bemescape.results.store import is_result_folder, load_result, save_result
from bemescape.results.summary import (
    Checks,
    MadeWith,
    RuleOfThumb,
    SlowRegion,
    Summary,
    WindowSummary,
    summary_schema,
)
from bemescape.surface import Surface, heal_surface
from bemescape.windows.window import Window

ARRAYS = ("vertices", "faces", "parent_face", "panel_window", "panel_time_s", "panel_exit_density_per_um2")


@pytest.fixture
def result(monkeypatch):
    """Made-up times on a healed ball of 80 panels, with digits that decimals cannot hold."""
    ball = trimesh.creation.icosphere(1, 0.1)
    surface = heal_surface(Surface(ball.vertices, ball.faces[1:], name="ball"))
    heights = surface.vertices[surface.faces][:, :, 2].mean(axis=1)
    window = np.where(heights > 0.08, 0, np.where(heights < -0.09, 1, -1))
    noise = np.random.default_rng(5).random(len(heights))
    made = EscapeResult(
        name="ball",
        vertices=surface.vertices,
        faces=surface.faces,
        parent_face=np.arange(len(heights)),
        panel_window=window,
        panel_time_s=np.where(window == 0, 0.0, noise / 3.0),
        panel_exit_density_per_um2=np.where(window >= 0, noise / 7.0, 0.0),
        windows=(WindowResult("neck", 0.01, 2.0 / 3.0), WindowResult("pore µ", 0.002, 1.0 / 3.0, 12.5)),
        diffusion_um2_s=20.0,
        mean_time_s=0.1 + 0.2,
        relative_error=1.0 / 300.0,
        target=0.005,
        target_met=True,
        balance=-1e-17,
        residuals=(1.0, 1e-3, 1.0 / 3e9),
        levels=({"panels": 40, "mean_time_s": 0.31, "iterations": 3, "seconds": 0.5},),
        wall_s=1.25,
        start={"vesicle": 0.29},
        notes=("healing closed a hole",),
        settings={"max_panels": 60000, "tolerance": 1e-8, "far": {"order": 2}, "method": None},
        mesh_sha256="0" * 64,
        health=surface.health,
        healing=surface.healing,
    )
    made.__dict__["summary"] = Summary(
        name=made.name,
        mean_time_s=made.mean_time_s,
        relative_error=made.relative_error,
        target_met=True,
        diffusion_um2_s=20.0,
        volume_um3=0.004,
        area_um2=0.12,
        windows=[
            WindowSummary(name=w.name, area_um2=w.area_um2, share=w.share, permeability_um_s=p)
            for w, p in zip(made.windows, (None, 12.5), strict=True)
        ],
        slowest_time_s=1.0 / 3.0,
        slow_regions=[
            SlowRegion(
                area_um2=0.01,
                mean_time_s=0.3,
                centre_um=(0.0, 0.1, 0.0),
                distance_to_window_um=0.1,
                nearest_window="neck",
            )
        ],
        rule_of_thumb=RuleOfThumb(formula="V / (4 D Σa)", mean_time_s=0.25),
        panels=len(made.faces),
        iterations=3,
        wall_s=1.25,
        checks=Checks(balance=made.balance),
        made_with=MadeWith(version="0.1.0", mesh_sha256="0" * 64, settings={"max_panels": 60000}),
    )
    regions = SimpleNamespace(panel_region=np.where(noise > 0.9, 0, -1))
    monkeypatch.setattr(EscapeResult, "slow_regions", lambda self, wall_fraction=0.1: regions)
    return made


@pytest.fixture
def folder(result, tmp_path):
    return save_result(result, tmp_path / "out", pictures=False)


def test_every_field_comes_back_exactly(result, folder):
    loaded = load_result(folder)
    for field in fields(EscapeResult):
        saved, found = getattr(result, field.name), getattr(loaded, field.name)
        if field.name in ARRAYS:
            assert found.dtype == saved.dtype
            np.testing.assert_array_equal(found, saved)
        else:
            assert found == saved, field.name
            assert type(found) is type(saved), field.name
    assert loaded.windows[0].permeability_um_s == math.inf
    assert loaded.healing.lines() == result.healing.lines()
    assert loaded.summary == result.summary


def test_summary_json_fits_the_published_schema(folder):
    jsonschema.validate(json.loads((folder / "summary.json").read_text()), summary_schema())


def test_the_surface_file_carries_the_panel_values_for_other_programs(result, folder):
    mesh = pyvista.read(folder / "surface.vtp")
    np.testing.assert_array_equal(mesh.points, result.vertices)
    np.testing.assert_array_equal(mesh.regular_faces, result.faces)
    for name, values in {
        "time_s": result.panel_time_s,
        "exit_density_per_um2": result.panel_exit_density_per_um2,
        "window": result.panel_window,
        "slow_region": result.slow_regions().panel_region,
        "parent_face": result.parent_face,
    }.items():
        np.testing.assert_array_equal(mesh.cell_data[name], values)


def test_a_result_holds_no_pickled_objects(folder):
    with zipfile.ZipFile(folder / "result.npz") as archive:
        names = archive.namelist()
    with np.load(folder / "result.npz", allow_pickle=False) as archive:
        assert all(archive[name.removesuffix(".npy")].dtype.kind in "fiu" for name in names)


def test_saving_again_replaces_the_result_and_its_pictures_but_nothing_else(result, folder):
    for name in (*store.PICTURES, "report.html", "notes.txt", "mine.png"):
        (folder / name).write_text("old")
    object.__setattr__(result, "notes", ("second",))
    save_result(result, folder, pictures=False)
    assert load_result(folder).notes == ("second",)
    assert {path.name for path in folder.iterdir()} == {
        "summary.json", "surface.vtp", "result.npz", "notes.txt", "mine.png",
    }  # fmt: skip


@pytest.mark.parametrize("failing", ["_write_values", "_write_surface"])
def test_a_failure_while_writing_leaves_the_earlier_result_whole(result, folder, monkeypatch, failing):
    before = {path.name: path.read_bytes() for path in folder.iterdir()}

    def fail(_result, path):
        path.write_bytes(b"half")
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(store, failing, fail)
    with pytest.raises(SettingsError, match="cannot be written: No space left on device"):
        save_result(result, folder, pictures=False)
    assert {path.name: path.read_bytes() for path in folder.iterdir()} == before


@pytest.mark.parametrize("stuck", ["result.npz", "surface.vtp", "summary.json"])
def test_a_failure_while_moving_leaves_no_summary(result, folder, monkeypatch, stuck):
    replace = store.os.replace

    def fail(source, target):
        if target.name == stuck:
            raise OSError(5, "Input/output error")
        replace(source, target)

    monkeypatch.setattr(store.os, "replace", fail)
    with pytest.raises(SettingsError, match="Input/output error"):
        save_result(result, folder, pictures=False)
    assert not (folder / "summary.json").exists()
    with pytest.raises(SettingsError, match=r"not a complete result: summary.json missing"):
        load_result(folder)
    assert is_result_folder(folder)


def test_files_of_something_else_are_not_overwritten(result, tmp_path):
    (tmp_path / "summary.json").write_text('{"precious": true}')
    with pytest.raises(SettingsError, match=r"summary.json exists and belongs to no saved result"):
        save_result(result, tmp_path, pictures=False)
    assert (tmp_path / "summary.json").read_text() == '{"precious": true}'
    assert [path.name for path in tmp_path.iterdir()] == ["summary.json"]


def test_a_folder_that_cannot_be_made_is_named(result, tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(SettingsError, match=r"file/out cannot be written"):
        save_result(result, tmp_path / "file" / "out", pictures=False)


def test_what_is_no_result_folder_is_refused(tmp_path):
    with pytest.raises(SettingsError, match=r"there is no result folder .*lost"):
        load_result(tmp_path / "lost")
    with pytest.raises(SettingsError, match=r"summary.json and result.npz missing"):
        load_result(tmp_path)
    (tmp_path / "file").write_text("")
    with pytest.raises(SettingsError, match="is a file; give the folder"):
        load_result(tmp_path / "file")
    assert not is_result_folder(tmp_path)
    assert not is_result_folder(tmp_path / "lost")


@pytest.mark.parametrize("name", ["summary.json", "result.npz"])
@pytest.mark.parametrize("damage", [lambda b: b"", lambda b: b[: len(b) // 2], lambda b: b"\x00" * len(b)])
def test_a_damaged_file_is_named(folder, name, damage):
    path = folder / name
    path.write_bytes(damage(path.read_bytes()))
    with pytest.raises(SettingsError, match=rf"{name} is damaged or not ours \(.*\); solve again") as caught:
        load_result(folder)
    assert "\n" not in str(caught.value)


def rewritten(folder, **changes):
    """The folder with some arrays of its result.npz replaced; None drops one."""
    with np.load(folder / "result.npz") as archive:
        arrays = dict(archive)
    arrays = {name: array for name, array in (arrays | changes).items() if array is not None}
    np.savez(folder / "result.npz", **arrays)
    return folder


@pytest.mark.parametrize(
    "changes",
    [
        {"faces": None},
        {"faces": np.full((80, 3), 10**9)},
        {"faces": np.full((80, 3), -1)},
        {"faces": np.zeros((80, 3))},
        {"faces": np.zeros((0, 3), np.int64)},
        {"panel_window": np.full(80, 7)},
        {"panel_time_s": np.zeros(79)},
        {"vertices": np.full((42, 3), np.nan)},
        {"header_json": np.frombuffer(b'{"format": "another 1"}', np.uint8)},
        {"header_json": np.frombuffer(b'{"format": "bemescape result 1"}', np.uint8)},
        {"header_json": np.frombuffer(b"[" * 100_000, np.uint8)},
        {"header_json": np.array([{"pickled": "object"}], dtype=object)},
    ],
)
def test_arrays_that_do_not_fit_are_refused_before_they_are_used(folder, changes):
    with pytest.raises(SettingsError, match=r"result.npz is damaged or not ours"):
        load_result(rewritten(folder, **changes))


def test_files_of_two_results_in_one_folder_are_refused(folder):
    content = json.loads((folder / "summary.json").read_text())
    content["mean_time_s"] *= 1.0 + 1e-15
    (folder / "summary.json").write_text(json.dumps(content))
    with pytest.raises(SettingsError, match="mixes files of two results"):
        load_result(folder)


def test_a_real_result_answers_after_loading_as_before(tmp_path):
    ball = trimesh.creation.icosphere(2, 0.5)
    solved = solve_escape(
        Surface(ball.vertices, ball.faces, name="ball"),
        [Window.disc("pore", centre=(0.0, 0.0, 0.5), radius="200 nm")],
        "20 um^2/s",
        target=0.2,
    )
    loaded = EscapeResult.load(solved.save(tmp_path / "ball", pictures=False))
    inside = [[0.0, 0.0, 0.0], [0.1, -0.2, 0.3]]
    # The same arrays go through the same code, so nothing may differ.
    np.testing.assert_array_equal(loaded.time_at(inside), solved.time_at(inside))
    assert loaded.summary == summarise(loaded) == solved.summary
    assert repr(loaded) == repr(solved)


def test_a_damaged_part_of_a_result_is_refused(tmp_path):
    ball = trimesh.creation.icosphere(2, 0.5)
    surface = Surface(ball.vertices, ball.faces, {"wall": np.ones(len(ball.faces))}, name="ball")
    solved = solve_escape(surface, [Window.labels("wall", array="wall", value=1)], "20 um^2/s", target=0.2)
    saved = solved.save(tmp_path / "ball", pictures=False)
    with np.load(saved / "result.npz") as archive:
        arrays = dict(archive)
    arrays["spread.panel_second_moment_s2"] = arrays["spread.panel_second_moment_s2"][:-1]
    np.savez(saved / "result.npz", **arrays)
    with pytest.raises(SettingsError, match=r"spread\.panel_second_moment_s2"):
        load_result(saved)
