"""Second opinions: what they compare, what they say, and that they are kept with the result."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import exact
import shapes
from bemescape.bem import galerkin
from bemescape.bem.galerkin import GalerkinAnswer
from bemescape.case import read_case
from bemescape.cli.answer import summary_lines
from bemescape.errors import AccuracyError, SettingsError
from bemescape.results.result import EscapeResult, WindowResult
from bemescape.windows import coarsen

MESHES = Path(__file__).parents[2] / "meshes"


def prism_result(*, mean=1.0 / 3.0, error=0.002, cells=8):
    """A unit cube with one face open, and the exact mean of it unless another is given."""
    body = shapes.box(cells=cells, label=lambda centre: int(centre[2] > 0.999))
    window = np.where(body.face_data["label"] == 1, 0, -1)
    return EscapeResult(
        name="prism",
        vertices=body.vertices,
        faces=body.faces,
        parent_face=np.arange(len(body.faces)),
        panel_window=window,
        panel_time_s=np.where(window < 0, 0.4, 0.0),
        panel_exit_density_per_um2=np.where(window < 0, 0.0, 1.0),
        windows=(WindowResult("end", 1.0, 1.0),),
        diffusion_um2_s=1.0,
        mean_time_s=mean,
        relative_error=error,
        target=0.005,
        target_met=True,
        balance=0.0,
        residuals=(1e-7,),
        levels=(),
        wall_s=1.0,
    )


@pytest.fixture
def galerkin_says(monkeypatch):
    """Stands for bempp-cl: these mean times, coarse mesh first."""
    meshes = []

    def install(coarse, fine, share=1.0):
        answers = iter((coarse, fine))

        def solve(vertices, faces, panel_window, diffusion, matrices, *, permeability_um_s):
            meshes.append(len(faces))
            return GalerkinAnswer(next(answers), np.array([share]), np.zeros(1), np.zeros(1), 1)

        monkeypatch.setattr(galerkin, "galerkin_matrices", lambda vertices, faces: None)
        monkeypatch.setattr(galerkin, "solve_mixed", solve)
        return meshes

    return install


def test_walkers_agree_with_the_exact_mean_and_not_with_one_a_tenth_off():
    right = prism_result().walkers(5000, seed=3)
    wrong = prism_result(mean=1.1 / 3.0).walkers(5000, seed=3)
    assert right.agrees
    assert right.line.startswith("agrees with 5000 walkers within")
    assert right.mean_time_s == pytest.approx(exact.prism_mean(1.0), abs=3.0 * right.standard_error_s)
    assert not wrong.agrees
    assert wrong.line.startswith("does NOT agree with 5000 walkers within")


def test_what_is_allowed_for_walkers_is_three_standard_errors_and_the_error_of_the_result():
    opinion = prism_result(error=0.01).walkers(400)
    # One mean is compared: the normal quantile of three standard errors is 2.9998 at the rounded 0.27 %.
    assert opinion.allowed == pytest.approx(
        3.0 * opinion.standard_error_s / prism_result().mean_time_s + 0.01, rel=1e-3
    )


def test_a_galerkin_answer_within_both_errors_agrees(galerkin_says):
    meshes = galerkin_says(0.334, 0.3336)
    opinion = prism_result(cells=20).crosscheck()
    assert opinion.agrees
    assert meshes[0] <= 1500 < meshes[1] == opinion.panels <= 3000
    assert opinion.mean_time_s == pytest.approx(0.3336 - 1.5 * 0.0004)
    assert opinion.difference == pytest.approx(0.333 * 3.0 - 1.0, abs=1e-12)
    # Half as much again as the step between the two meshes, and the floor; a box keeps its windows and its volume.
    assert opinion.relative_error == pytest.approx(1.5 * 0.0004 / 0.333 + 1e-3, rel=1e-6)
    assert opinion.allowed == pytest.approx(opinion.relative_error + 0.002)
    assert opinion.line.startswith("agrees with a Galerkin solution by bempp-cl on")


def test_an_agreement_within_a_wide_margin_is_not_called_one(galerkin_says):
    galerkin_says(0.40, 0.36)
    opinion = prism_result(cells=20).crosscheck()
    assert opinion.agrees
    assert opinion.allowed > 0.1
    assert opinion.line.startswith("is not contradicted by a Galerkin solution")
    assert opinion.line.endswith("an agreement confirms little")


def test_a_galerkin_answer_beyond_both_errors_does_not_agree(galerkin_says):
    galerkin_says(0.334, 0.3336)
    assert not prism_result(mean=0.35, cells=20).crosscheck().agrees


def test_a_wrong_share_alone_is_a_disagreement(galerkin_says):
    galerkin_says(1.0 / 3.0, 1.0 / 3.0, share=0.97)
    opinion = prism_result().crosscheck()
    assert abs(opinion.difference) < 1e-12
    assert opinion.share_difference == pytest.approx(0.03)
    assert not opinion.agrees


def test_opinions_land_in_summary_and_answer_and_survive_saving(galerkin_says, tmp_path):
    galerkin_says(0.334, 0.3336)
    made = prism_result()
    made = replace(made, crosschecked=made.crosscheck(), walked=made.walkers(200))
    checks = made.summary.checks
    assert checks.crosscheck.agrees is made.crosschecked.agrees
    assert checks.crosscheck.statement == made.crosschecked.line
    assert checks.walkers.shares == {"end": 1.0}
    answer = "\n".join(summary_lines(made.summary))
    assert f"second opinion  {made.walked.line}" in answer
    assert f"second opinion  {made.crosschecked.line}" in answer
    again = EscapeResult.load(made.save(tmp_path / "saved", pictures=False))
    assert again.crosschecked == made.crosschecked
    assert again.walked == made.walked
    assert again.summary == made.summary


@pytest.mark.parametrize(("count", "seed", "told"), [(99, 0, "walkers is 99"), (1000, -1, "seed is -1")])
def test_numbers_out_of_range_are_refused(count, seed, told):
    with pytest.raises(SettingsError, match=told):
        prism_result().walkers(count, seed=seed)


def test_a_window_without_panels_is_named():
    bare = prism_result()
    bare = replace(bare, windows=(*bare.windows, WindowResult("pore 7", 1e-4, 0.0)))
    for ask in (bare.crosscheck, lambda: bare.walkers(1000)):
        with pytest.raises(SettingsError, match=r"1 windows of 'prism' have no panels \('pore 7'"):
            ask()


def test_a_mesh_that_cannot_be_coarsened_is_refused_with_its_count(monkeypatch):
    monkeypatch.setattr(coarsen, "_collapse_round", lambda *arguments: 0)
    # Twenty cells along an edge: 4 800 panels.
    with pytest.raises(AccuracyError, match=r"'prism' cannot be coarsened below 4800 panels"):
        prism_result(cells=20).crosscheck()


@pytest.mark.slow
@pytest.mark.parametrize(
    # Through the necks of spine and mitochondrion a walker needs thousands of jumps: a fifth of the walkers there.
    # Forty rims leave the Galerkin mesh of the nucleus 75 panels each: it says itself that its error is a third.
    ("name", "walkers", "galerkin_error"),
    [
        ("bouton", 100_000, 0.02),
        ("nucleus", 100_000, 0.5),
        ("spine", 20_000, 0.02),
        ("mitochondrion", 20_000, 0.02),
    ],
)
def test_both_opinions_agree_on_the_demo_shapes(name, walkers, galerkin_error):
    result = read_case(MESHES / f"{name}.toml").solve()
    walked = result.walkers(walkers, seed=1)
    assert walked.agrees, walked.line
    # 1/√walkers of the mean for an exponential law, whatever the shape; and no walker is lost on a closed surface.
    assert walked.standard_error_s < 1.2 * walked.mean_time_s / np.sqrt(walkers)
    assert walked.lost == 0
    checked = result.crosscheck()
    assert checked.agrees, checked.line
    assert checked.relative_error < galerkin_error
