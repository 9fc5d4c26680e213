"""A case file, and a made-up result in place of its solve."""

from types import SimpleNamespace

import numpy as np
import pytest
import trimesh

from bemescape.case import Case
from bemescape.progress import ProgressEvent
from bemescape.results.result import EscapeResult, WindowResult
from bemescape.results.summary import Checks, MadeWith, RuleOfThumb, SlowRegion, Summary, WindowSummary

CASE = """
[surface]
file = "ball.ply"
unit = "nm"
[motion]
diffusion = "20 um^2/s"
[[window]]
name = "neck"
disc = { centre = [0, 0, 100], radius = "40 nm" }
[accuracy]
target = "0.5 %"
[start]
points = { vesicle = [0, 0, 0] }
"""


def painted_result(*, error: float = 0.003, target: float = 0.005) -> EscapeResult:
    """A ball of 80 panels with times that nobody computed."""
    ball = trimesh.creation.icosphere(1, 0.1)
    window = np.where(ball.triangles_center[:, 2] > 0.08, 0, -1)
    result = EscapeResult(
        name="ball",
        vertices=ball.vertices,
        faces=ball.faces,
        parent_face=np.arange(80),
        panel_window=window,
        panel_time_s=np.where(window < 0, 0.0125, 0.0),
        panel_exit_density_per_um2=np.where(window < 0, 0.0, 100.0),
        windows=(WindowResult("neck", 0.01, 1.0),),
        diffusion_um2_s=20.0,
        mean_time_s=0.01234567,
        relative_error=error,
        target=target,
        target_met=error <= target,
        balance=2e-6,
        residuals=(1.0, 1e-9),
        levels=(),
        wall_s=0.5,
        start={"vesicle": 0.0131},
    )
    result.__dict__["summary"] = Summary(
        name="ball",
        mean_time_s=result.mean_time_s,
        relative_error=error,
        target_met=result.target_met,
        diffusion_um2_s=20.0,
        volume_um3=0.004,
        area_um2=0.12,
        windows=[WindowSummary(name="neck", area_um2=0.01, share=1.0)],
        start={"vesicle": 0.0131},
        slowest_time_s=0.0145,
        slow_regions=[
            SlowRegion(
                area_um2=0.01,
                mean_time_s=0.014,
                centre_um=(0.0, 0.0, -0.1),
                distance_to_window_um=0.21,
                nearest_window="neck",
            )
        ],
        rule_of_thumb=RuleOfThumb(formula="V / (4 D Σa)", mean_time_s=0.011),
        panels=80,
        iterations=2,
        wall_s=0.5,
        checks=Checks(balance=2e-6),
        notes=["healing closed a hole of 3 edges"],
        made_with=MadeWith(version="0.1.0", mesh_sha256="", settings={}),
    )
    return result


class PaintedSolve:
    """Stands for `Case.solve`: reports progress, then hands out `result` or raises `error`."""

    def __init__(self) -> None:
        self.result = painted_result()
        self.error: BaseException | None = None
        self.case: Case | None = None

    def __call__(self, case, progress):
        self.case = case
        progress(ProgressEvent("near field", None, "80 panels"))
        progress(ProgressEvent("iterating", 0.5, "residual 1e-03"))
        progress(ProgressEvent("iterating", 1.0, "residual 1e-09"))
        if self.error is not None:
            raise self.error
        return self.result


@pytest.fixture
def painted(monkeypatch):
    """The stand-in for the solve; change its `result` or `error` before a run."""
    solve = PaintedSolve()
    monkeypatch.setattr(Case, "solve", lambda self, progress: solve(self, progress))
    monkeypatch.setattr(
        EscapeResult,
        "slow_regions",
        lambda self, wall_fraction=0.1: SimpleNamespace(panel_region=np.full(80, -1)),
    )
    return solve


@pytest.fixture
def workplace(tmp_path, monkeypatch):
    """An empty current folder with `cases/ball.toml` and its mesh."""
    (tmp_path / "cases").mkdir()
    (tmp_path / "cases" / "ball.toml").write_text(CASE)
    ball = trimesh.creation.icosphere(2, 100.0)
    ball.export(tmp_path / "cases" / "ball.ply")
    monkeypatch.chdir(tmp_path)
    return tmp_path
