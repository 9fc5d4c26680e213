"""`bemescape explore`: files, answer, exit codes. The exploration itself is a stand-in here."""

import json

import numpy as np
import pytest
import trimesh

from bemescape.arrangements.exploration import Arrangement, ClusteringRow, Exploration, SweepRow
from bemescape.case import Case, read_case
from bemescape.cli.main import main
from bemescape.errors import WindowError
from bemescape.progress import ProgressEvent
from bemescape.results.result import EscapeResult, WindowResult
from shapes import ball

EXPLORE = """
[explore]
scatter = { count = 5, radius = "10 nm" }
open_windows = 2
"""
RUN = ["explore", "cases/ball.toml", "--no-pictures"]


def painted_solve(name, time, *, met=True):
    """A ball of 80 panels with times that nobody computed."""
    sphere = trimesh.creation.icosphere(1, 0.1)
    return EscapeResult(
        name=name, vertices=sphere.vertices, faces=sphere.faces, parent_face=np.arange(80),
        panel_window=np.where(sphere.triangles_center[:, 2] > 0.08, 0, -1), panel_time_s=np.full(80, time),
        panel_exit_density_per_um2=np.zeros(80), windows=(WindowResult("site[1]", 0.01, 1.0),), diffusion_um2_s=20.0,
        mean_time_s=time, relative_error=0.003, target=0.005, target_met=met, balance=0.0, residuals=(), levels=(),
        wall_s=0.1,
    )  # fmt: skip


def painted_exploration(*, met=True):
    return Exploration(
        name="ball",
        surface=ball(1),
        site_names=tuple(f"site[{k + 1}]" for k in range(5)),
        places_um=np.eye(5, 3),
        site_time_s=np.linspace(0.02, 0.03, 5),
        diffusion_um2_s=20.0,
        radius_um=0.01,
        permeability_um_s=np.inf,
        open_windows=2,
        sweep_site="site[3]",
        sweep=(SweepRow(radius_um=0.02, mean_time_s=0.0125, relative_error=0.004),),
        clustering=(
            ClusteringRow(
                open_windows=2, spread_time_s=0.01, clustered_time_s=0.0125, lost_to_clustering=0.25,
                spread_sites=["site[1]", "site[5]"], clustered_sites=["site[1]", "site[2]"],
            ),
        ),
        best=Arrangement(
            sites=["site[1]", "site[5]"], mean_time_s=0.01, shares={"site[1]": 0.5, "site[5]": 0.5},
            solved_time_s=0.0101, solved_relative_error=0.003, difference=-0.0099,
        ),
        worst=Arrangement(sites=["site[1]", "site[2]"], mean_time_s=0.0126, shares={"site[1]": 0.5, "site[2]": 0.5}),
        solved={"best": painted_solve("best", 0.0101), "worst": painted_solve("worst", 0.0127, met=met)},
        tried=10,
        complete=True,
        sampled_s=np.linspace(0.01, 0.0126, 10),
        asymmetry=1e-5,
        seconds={"arrangements": 0.01},
        notes=("a note",),
        settings={},
    )  # fmt: skip


@pytest.fixture
def painted(workplace, monkeypatch):
    """The stand-in; what it was called with is in its list, what it gives or raises in `answer`."""

    class Stand:
        def __init__(self):
            self.answer = painted_exploration()
            self.cases = []

        def __call__(self, case, progress):
            self.cases.append(case)
            progress(ProgressEvent("searching", 1.0, "all 10 arrangements"))
            if isinstance(self.answer, Exception):
                raise self.answer
            return self.answer

    stand = Stand()
    monkeypatch.setattr(Case, "explore", lambda self, progress: stand(self, progress))
    case = workplace / "cases" / "ball.toml"
    case.write_text(case.read_text() + EXPLORE)
    return stand


def test_the_answer_goes_into_a_folder_of_its_own(workplace, painted, capsys):
    assert main(RUN) == 0
    assert sorted(path.name for path in (workplace / "ball-explore").iterdir()) == [
        "arrangements.csv", "best", "clustering.csv", "exploration.json", "sites.csv", "sweep.csv", "worst",
    ]  # fmt: skip
    printed = capsys.readouterr()
    for part in (
        "ball: 2 of 5 sites open, radius 10 nm, D 20 µm²/s",
        "smallest mean time 10.1 ms ± 0.3 %",
        "-0.99 %",
        "site[1], site[5]",
        "25 %",
        "20 nm 12.5 ms 0.4 %",
        "10, all there are; median 11.3 ms",
        "note: a note",
        "Research tool.",
    ):
        assert part in " ".join(printed.out.split())
    assert printed.err.splitlines() == ["searching 100%: all 10 arrangements", "saving: ball-explore"]


def test_json_is_the_summary_alone_on_stdout(workplace, painted, capsys):
    assert main([*RUN, "--json", "-q"]) == 0
    printed = capsys.readouterr()
    assert printed.err == ""
    assert json.loads(printed.out) == json.loads((workplace / "ball-explore" / "exploration.json").read_text())


def test_an_earlier_exploration_is_replaced_and_other_files_are_refused(workplace, painted, capsys):
    assert main(RUN) == 0
    assert main(RUN) == 0
    (workplace / "letters").mkdir()
    (workplace / "letters" / "precious.txt").write_text("kept")
    assert main([*RUN, "--out", "letters"]) == 2
    assert "folder letters holds other files" in capsys.readouterr().err
    assert len(painted.cases) == 2


def test_a_missed_target_is_exit_code_1_with_the_answer_saved(workplace, painted, capsys):
    painted.answer = painted_exploration(met=False)
    assert main([*RUN, "-q"]) == 1
    assert "the full solve of the worst arrangement ended at an error of 0.30%" in capsys.readouterr().err
    assert (workplace / "ball-explore" / "exploration.json").is_file()


def test_a_refusal_is_one_line_and_writes_nothing(workplace, painted, capsys):
    painted.answer = WindowError("'site[2]' lies 3 µm off the wall")
    assert main([*RUN, "-q"]) == 2
    assert capsys.readouterr().err == "bemescape: 'site[2]' lies 3 µm off the wall\n"
    assert not (workplace / "ball-explore").exists()


def test_the_number_of_arrangements_can_be_given(workplace, painted, capsys):
    main([*RUN, "--arrangements", "500"])
    assert painted.cases[0].document.explore.arrangements == 500
    assert main([*RUN, "--arrangements", "many"]) == 2
    assert main([*RUN, "--arrangements", "7"]) == 2
    error = capsys.readouterr().err
    assert "--arrangements is 'many'; give a whole number, like 10000" in error
    assert "[explore] arrangements is 7" in error


def test_a_case_without_the_section_is_told_what_to_add(workplace, capsys):
    assert main(RUN) == 2
    assert "has no [explore]; add it with open_windows and points or scatter" in capsys.readouterr().err


def test_a_case_may_have_no_window_for_explore_alone(workplace, capsys):
    path = workplace / "cases" / "ball.toml"
    text = path.read_text()
    start, end = text.index("[[window]]"), text.index("[accuracy]")
    path.write_text(text[:start] + text[end:] + EXPLORE)
    assert read_case(path).document.window == ()
    assert main(["solve", "cases/ball.toml", "-q"]) == 2
    assert "has no [[window]]; nothing can leave" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("section", "sentence"),
    [
        ("open_windows = 2", "[explore] has neither points nor scatter"),
        ('scatter = { count = 5, radius = "10 nm" }', "[explore] open_windows is missing; write open_windows = 4"),
        ('scatter = { count = 5, radius = "10 nm" }\nopen_window = 2', "did you mean 'open_windows'?"),
        ('scatter = { count = 5, radius = "10 nm" }\nopen_windows = 0', "[explore] open_windows is 0"),
        ("scatter = { count = 5, radius = 10 }\nopen_windows = 2", "is the plain number 10; give it with its unit"),
        (
            'scatter = { count = 5, radius = "10 nm" }\nopen_windows = 2\nsweep = ["10 nm", "-3 nm"]',
            "[explore] sweep[1]",
        ),
        ('points = { file = "lost.csv", radius = "10 nm" }\nopen_windows = 2', "there is no file cases/lost.csv"),
    ],
)
def test_a_wrong_section_is_told_with_its_place(workplace, capsys, section, sentence):
    path = workplace / "cases" / "ball.toml"
    path.write_text(path.read_text() + "[explore]\n" + section + "\n")
    assert main([*RUN, "-q"]) == 2
    error = capsys.readouterr().err
    assert sentence in error
    assert error.count("\n") == 1
