"""A small study of real solves from the file to the report, and the known answer of the demo's generator."""

import json
import math
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import trimesh
from scipy import stats

from bemescape.cli.main import main
from bemescape.results.result import EscapeResult
from bemescape.study.run import run_study
from study_processes import environment

MESHES = Path(__file__).resolve().parents[2] / "meshes"
STUDY = """
[[shapes]]
list = "balls.csv"
unit = "um"
[motion]
diffusion = "2 um^2/s"
[[window]]
name = "cap"
disc = { centre = [0, 0, 1], radius = "800 nm" }
[accuracy]
target = "20 %"
max_panels = 100
"""


@pytest.fixture(scope="module")
def worker_here():
    """Address of a scheduler with a worker in this process, where the solver is loaded already."""
    from distributed import LocalCluster

    with LocalCluster(
        n_workers=1, threads_per_worker=1, processes=False, dashboard_address=":0", memory_limit=None
    ) as cluster:
        yield cluster.scheduler_address


@pytest.fixture(scope="module")
def heard():
    """The events of `solved`."""
    return []


@pytest.fixture(scope="module")
def solved(tmp_path_factory, worker_here, heard):
    """Three balls at one resolution and one mesh that the window misses: the folder and the result."""
    folder = tmp_path_factory.mktemp("balls")
    rows = ["file,group,subject"]
    for number, (radius, height) in enumerate(((1.0, 0.0), (1.1, -0.1), (0.9, 0.1), (1.0, 9.0))):
        ball = trimesh.creation.icosphere(2, radius=radius)
        ball.apply_translation((0.0, 0.0, height))
        ball.export(folder / f"ball_{number}.ply")
        rows.append(f"ball_{number}.ply,{'AABB'[number]},")
    (folder / "balls.csv").write_text("\n".join(rows) + "\n")
    (folder / "balls.study.toml").write_text(STUDY)
    return run_study(folder / "balls.study.toml", folder / "out", scheduler=worker_here, events=heard.append)


def test_every_shape_has_a_row_and_the_failure_its_reason(solved):
    table = solved.table.set_index("shape")
    assert list(table.index) == ["ball_0", "ball_1", "ball_2", "ball_3"]
    assert table.loc["ball_3", "failure"].startswith("balls.csv row 5: window 'cap'")
    assert "/tmp" not in table.loc["ball_3", "failure"]
    assert math.isnan(table.loc["ball_3", "mean_time_s"])
    assert (table.loc["ball_0":"ball_2", "failure"] == "").all()


def test_the_numbers_are_those_of_a_solve_of_the_shape_alone(solved):
    """The same case file solved in this process gives the same time to the rounding of sums on other threads."""
    from bemescape.case import parse_case

    case = solved.plan.cases[1]
    alone = parse_case(case.table, folder=case.shape.path.parent, name="alone").solve()
    row = solved.table.set_index("shape").loc["ball_1"]
    assert row["mean_time_s"] == pytest.approx(alone.mean_time_s, rel=1e-4)
    assert row["volume_um3"] == pytest.approx(alone.volume_um3, rel=1e-12)
    assert row["share_cap"] == pytest.approx(alone.shares["cap"], rel=1e-4)


def test_the_stored_results_can_be_loaded(solved):
    stored = solved.stored[solved.plan.cases[0].key]
    assert EscapeResult.load(stored.folder).mean_time_s == stored.values["mean_time_s"]


def test_csv_and_parquet_hold_the_same_table_with_units_in_the_names(solved):
    csv = pd.read_csv(solved.folder / "cases.csv")
    parquet = pd.read_parquet(solved.folder / "cases.parquet")
    assert list(csv.columns) == list(parquet.columns)
    numbers = parquet.select_dtypes("float").columns
    pd.testing.assert_frame_equal(csv[numbers].astype(float), parquet[numbers].astype(float), check_exact=True)
    for column in ("mean_time_s", "volume_um3", "area_um2", "longest_geodesic_um", "diffusion_um2_s", "cv", "balance"):
        assert column in csv.columns
    # Names in R and in Python: read.csv and attribute access leave them as they are.
    assert all(re.fullmatch(r"[A-Za-z][A-Za-z0-9_]*", column) for column in csv.columns)
    assert csv["mean_time_s"].isna().sum() == 1  # the failed case: an empty cell, not a zero


def test_progress_says_what_runs_what_is_left_and_what_failed(heard, solved):
    progress = [event for event in heard if event["event"] == "progress"]
    assert all(event["cases"] == 4 and event["left_s"] >= 0.0 for event in progress)
    assert progress[0]["done"] == 0
    assert any(event["running"] for event in progress)
    order = [event["event"] for event in heard if event["event"] != "progress"]
    assert order[:2] == ["planned", "workers"]
    assert [order.count(kind) for kind in ("started", "finished", "failed")] == [4, 3, 1]
    assert order[-1] == "done"
    json.dumps(heard)  # what --json prints


def test_the_report_stands_alone_and_says_what_a_reader_needs(solved):
    page = (solved.folder / "report.html").read_text(encoding="utf-8")
    assert not re.findall(r"(?:src|href)=\"(?!data:|#)", page)
    assert "http" not in re.sub(r"data:[^\"]+", "", page)
    for words in ("Research tool", "no test is meaningful", "balls.csv row 5", "aria-sort", "Settings, and how"):
        assert words in page
    # The scale of the largest ball is not that of the smallest: their pictures in both scales differ.
    rows = re.findall(r'<td class="picture"><img src="([^"]+)".*?<td class="picture"><img src="([^"]+)"', page)
    assert len(rows) == 3
    assert any(common != own for common, own in rows)
    # Two pictures a solved shape, one of its slow regions, the figure and the colour bar.
    assert page.count("<img") == 2 * 3 + 3 + 2
    assert (solved.folder / "figure.pdf").read_bytes().startswith(b"%PDF")
    assert b"<svg" in (solved.folder / "figure.svg").read_bytes()


@pytest.mark.slow
def test_the_table_of_the_report_sorts_in_a_browser_without_a_network(solved):
    playwright = pytest.importorskip("playwright.sync_api")
    chromium = Path("/usr/bin/chromium")
    if not chromium.exists():
        pytest.skip("no chromium here")
    with playwright.sync_playwright() as started:
        browser = started.chromium.launch(executable_path=str(chromium), args=["--no-sandbox"])
        page = browser.new_context(offline=True, viewport={"width": 1280, "height": 900}).new_page()
        faults, asked = [], []
        page.on("pageerror", lambda error: faults.append(str(error)))
        page.on("request", lambda request: asked.append(request.url))
        page.goto((solved.folder / "report.html").as_uri())

        def column(name):
            found = page.evaluate(
                """name => { const table = document.querySelector("table.sortable");
                const at = [...table.querySelectorAll("th")].findIndex(head => head.textContent === name);
                return [...table.tBodies[0].rows].map(row => row.cells[at].textContent); }""",
                name,
            )
            assert len(found) == 3
            return found

        assert column("rank") == ["1", "2", "3"]
        assert column("shape") == ["ball_1", "ball_0", "ball_2"]  # the slowest first: the largest, by its radius
        page.get_by_role("button", name="volume (µm³)", exact=True).click()
        assert column("shape") == ["ball_2", "ball_0", "ball_1"]
        page.get_by_role("button", name="shape", exact=True).click()
        assert column("shape") == ["ball_0", "ball_1", "ball_2"]
        page.get_by_role("button", name="shape", exact=True).click()
        assert column("shape") == ["ball_2", "ball_1", "ball_0"]
        assert page.locator("th[aria-sort=descending]").count() == 1
        # Nothing is wider than the window of a laptop.
        assert page.evaluate("document.documentElement.scrollWidth") <= 1280
        assert not faults
        assert [address for address in asked if not address.startswith(("file:", "data:"))] == []
        browser.close()


def test_the_command_goes_on_where_a_run_ended_and_prints_events_alone(solved, worker_here, capsys):
    study = solved.plan.study.folder / "balls.study.toml"
    options = ["--out", str(solved.folder), "--scheduler", worker_here, "--json", "--no-report", "-q"]
    assert main(["study", str(study), *options]) == 1
    events = [json.loads(line) for line in capsys.readouterr().out.splitlines()]
    assert events[0]["event"] == "planned"
    assert events[0]["finished_before"] == 3
    assert [event["case"] for event in events if event["event"] == "failed"] == ["ball_3"]
    assert events[-1] == {"event": "done", "finished": 3, "failed": 1, "folder": str(solved.folder)}


def test_the_plan_is_listed_and_nothing_is_solved(solved, capsys, tmp_path):
    study = solved.plan.study.folder / "balls.study.toml"
    assert main(["study", str(study), "--out", str(tmp_path / "none"), "--plan", "--json"]) == 0
    plan = json.loads(capsys.readouterr().out)
    assert [case["case"] for case in plan["cases"]] == ["ball_0", "ball_1", "ball_2", "ball_3"]
    assert plan["estimated_s"] > 0.0
    assert not (tmp_path / "none").exists()
    assert main(["study", str(study), "--plan"]) == 0
    assert "4 shapes, 4 cases, about" in capsys.readouterr().out


def test_wrong_input_is_one_sentence_and_exit_code_2(tmp_path, capsys):
    assert main(["study", str(tmp_path / "none.toml")]) == 2
    assert capsys.readouterr().err == f"bemescape: there is no study file {tmp_path / 'none.toml'}; check the path\n"
    assert main(["study", str(MESHES / "spines.study.toml"), "--workers", "many"]) == 2
    assert "--workers is 'many'; give a whole number" in capsys.readouterr().err


def test_saved_results_are_compared_in_a_table_and_one_picture(solved, capsys, tmp_path):
    folders = [str(stored.folder) for stored in solved.stored.values()][:2]
    png, csv = tmp_path / "both.png", tmp_path / "both.csv"
    assert main(["compare", *folders, "--png", str(png), "--csv", str(csv), "--json"]) == 0
    rows = json.loads(capsys.readouterr().out)["results"]
    assert len(rows) == 2
    assert png.read_bytes().startswith(b"\x89PNG")
    assert list(pd.read_csv(csv)["mean_time_s"]) == [row["mean_time_s"] for row in rows]
    assert main(["compare", *folders]) == 0
    assert "mean_time_s" in capsys.readouterr().out
    assert main(["compare", folders[0]]) == 2
    assert "compare takes 2 to 12" in capsys.readouterr().err


def test_an_unguarded_script_is_told_what_to_do(solved, tmp_path):
    """Workers load the script that started them; a call at its top level would start workers without end."""
    study = solved.plan.study.folder / "balls.study.toml"
    script = tmp_path / "script.py"
    script.write_text(f"import bemescape as be\nbe.run_study({str(study)!r}, {str(tmp_path / 'out')!r}, workers=1)\n")
    done = subprocess.run(
        [sys.executable, str(script)], capture_output=True, text=True, timeout=300, env=environment(), check=False
    )
    assert done.returncode != 0
    assert 'if __name__ == "__main__":' in done.stderr


@pytest.mark.slow
def test_the_regression_recovers_the_known_answer_of_the_demo_spines(tmp_path):
    """24 solves at the 1 % target against V L / (π a² D), the head's volume times the neck's resistance.

    The formula leaves out the way from the head into the neck's mouth, 1/(4a) for a disc in a wall (Berg & Purcell
    1977, doi:10.1016/S0006-3495(77)85544-6), which adds πa/(4L), 5 to 15 % here, and the time and volume of the neck
    itself. The slope on logarithms must be 1 to that error. With both put in, as diffusion along a line with a
    reservoir at its end gives them, slope and single times must be right to what is left: the sphere is no flat wall.
    """
    result = run_study(MESHES / "spines.study.toml", tmp_path / "out", report=False)
    table = result.table[result.table["diffusion_um2_s"] == 10.0]
    assert not result.failures
    assert (table["relative_error"] <= 0.01).all()
    trend = next(trend for trend in result.statistics.settings[0].trends if trend.column == "neck_formula_um2")
    assert trend.slope == pytest.approx(1.0, abs=0.15)
    length, radius = table["neck_length_nm"] * 1e-3, table["neck_radius_nm"] * 1e-3
    neck = length / (np.pi * radius**2)
    in_neck = np.pi * radius**2 * length
    head = table["head_volume_um3"]
    # x from the open end: T(x) = (V x / (π a²) + L x − x²/2) / D in the neck; in the head, T(L) and the mouth.
    from_head = head * (neck + 0.25 / radius) + 0.5 * length**2
    from_neck = 0.5 * head * neck + length**2 / 3.0
    formula = (head * from_head + in_neck * from_neck) / (head + in_neck)
    line = stats.linregress(np.log(formula / 10.0), np.log(table["mean_time_s"]))
    assert line.slope == pytest.approx(1.0, abs=0.02)
    assert np.abs(np.log(table["mean_time_s"] * 10.0 / formula)).max() < 0.05
    # D only scales the times.
    fast = result.table[result.table["diffusion_um2_s"] == 40.0]
    np.testing.assert_allclose(fast["mean_time_s"].to_numpy() * 4.0, table["mean_time_s"].to_numpy(), rtol=1e-6)
    # The generator's neck is found in the shape alone.
    np.testing.assert_allclose(table["narrowest_neck_radius_um"] * 1e3, table["neck_radius_nm"], rtol=0.03)


def test_one_solve_serves_every_diffusion_coefficient_and_gives_the_digits_of_a_solve_alone(
    solved, worker_here, tmp_path
):
    """Times of absorbing windows are in proportion to 1/D; with a permeability they are not, and each D is solved."""
    folder = solved.plan.study.folder
    text = STUDY.replace('list = "balls.csv"', 'files = "ball_0.ply"')
    swept = folder / "swept.study.toml"
    swept.write_text(text + '[sweep]\ndiffusion = ["2 um^2/s", "6 um^2/s"]\n')
    result = run_study(swept, tmp_path / "out", scheduler=worker_here, report=False)
    assert len({case.solve_key for case in result.plan.cases}) == 1
    two, six = result.table["mean_time_s"]
    assert two / six == pytest.approx(3.0, rel=1e-12)
    # Solved in another run and without a twin: the same to the last digit.
    assert two == solved.table["mean_time_s"][0]
    swept.write_text(text + '[sweep]\ndiffusion = ["2 um^2/s", "6 um^2/s"]\npermeability = ["5 um/s"]\n')
    from bemescape.study.document import read_study
    from bemescape.study.plan import plan_study

    assert len({case.solve_key for case in plan_study(read_study(swept)).cases}) == 2
