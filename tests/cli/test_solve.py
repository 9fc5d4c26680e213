"""`bemescape solve`: files, answer, exit codes. The solve itself is a stand-in here."""

import json

import pytest

from bemescape.cli.main import main
from bemescape.errors import AccuracyError, ConvergenceError, SurfaceError, WindowError
from bemescape.results import store
from bemescape.results.store import load_result

RUN = ["solve", "cases/ball.toml", "--no-pictures"]


def test_results_go_into_a_folder_named_after_the_case(workplace, painted, capsys):
    assert main(RUN) == 0
    assert sorted(path.name for path in (workplace / "ball").iterdir()) == [
        "result.npz",
        "summary.json",
        "surface.vtp",
    ]
    assert load_result(workplace / "ball").mean_time_s == painted.result.mean_time_s


def test_the_table_names_time_error_shares_slow_regions_files_and_the_caution(workplace, painted, capsys):
    main([*RUN, "--out", "here"])
    table = capsys.readouterr().out
    for part in (
        "ball: mean escape time 12.35 ms ± 0.3 %",
        "neck     0.01 µm²   100 %",
        "vesicle   13.1 ms",
        "14 ms       0.01 µm²   (0, 0, -0.1) µm   neck, 210 nm along the wall",
        "slowest place   14.5 ms",
        "rule of thumb   11 ms by V / (4 D Σa)",
        "80 panels, 2 iterations",
        "note: healing closed a hole of 3 edges",
        "here: result.npz, summary.json, surface.vtp",
        "Research tool.",
    ):
        assert part in table


def test_json_is_the_summary_alone_on_stdout(workplace, painted, capsys):
    assert main([*RUN, "--json"]) == 0
    printed = capsys.readouterr()
    assert json.loads(printed.out) == json.loads((workplace / "ball" / "summary.json").read_text())


def test_progress_goes_to_stderr_as_lines_where_that_is_no_terminal(workplace, painted, capsys):
    main(RUN)
    assert capsys.readouterr().err.splitlines() == [
        "near field: 80 panels",
        "iterating 50%: residual 1e-03",
        "iterating 100%: residual 1e-09",
        "saving: ball",
    ]
    main([*RUN, "--quiet"])
    assert capsys.readouterr().err == ""


def test_target_and_budget_of_the_command_line_replace_those_of_the_case(workplace, painted):
    main([*RUN, "--target", "2 %", "--max-panels", "500"])
    assert painted.case.document.accuracy.target == 0.02
    assert painted.case.document.accuracy.max_panels == 500
    main([*RUN, "--target", "0.01"])
    assert painted.case.document.accuracy.target == 0.01
    assert painted.case.document.accuracy.max_panels is None


def test_a_missed_target_is_exit_code_1_in_one_line_with_the_results_saved(workplace, painted, capsys):
    object.__setattr__(painted.result, "relative_error", 0.02)
    object.__setattr__(painted.result, "target_met", False)
    assert main([*RUN, "-q", "--json"]) == 1
    printed = capsys.readouterr()
    assert "target 0.5 % was not met: the estimated error is 2 % at 80 panels" in printed.err
    assert printed.err.count("\n") == 1
    json.loads(printed.out)
    assert (workplace / "ball" / "summary.json").is_file()


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (SurfaceError("the surface has a hole"), 2),
        (WindowError("window 'neck' lies 3 µm off the wall"), 2),
        (ConvergenceError("stopped at residual 1e-2"), 1),
        (AccuracyError("outflow is off by 3 %"), 1),
    ],
)
def test_an_error_of_the_solve_is_one_line_and_writes_nothing(workplace, painted, capsys, error, code):
    painted.error = error
    assert main([*RUN, "-q"]) == code
    printed = capsys.readouterr()
    assert printed.err == f"bemescape: {error}\n"
    assert printed.out == ""
    assert not (workplace / "ball").exists()


def test_an_unexpected_error_is_not_hidden(workplace, painted):
    painted.error = ZeroDivisionError("a bug")
    with pytest.raises(ZeroDivisionError):
        main([*RUN, "-q"])


def test_stopping_the_solve_writes_nothing_and_says_so(workplace, painted, capsys):
    painted.error = KeyboardInterrupt()
    assert main([*RUN, "-q"]) == 130
    assert capsys.readouterr().err == "bemescape: stopped; nothing was written\n"
    assert not (workplace / "ball").exists()


def test_stopping_while_pictures_are_drawn_keeps_the_numbers_and_says_so(workplace, painted, capsys, monkeypatch):
    def stop(result, folder):
        raise KeyboardInterrupt

    monkeypatch.setattr(store, "add_pictures", stop)
    assert main(["solve", "cases/ball.toml", "-q"]) == 130
    assert "the numbers are in ball, the pictures are missing" in capsys.readouterr().err
    assert load_result(workplace / "ball").name == "ball"


def test_a_folder_of_other_things_is_refused_before_the_solve(workplace, painted, capsys):
    (workplace / "ball").mkdir()
    (workplace / "ball" / "thesis.tex").write_text("precious")
    assert main(RUN) == 2
    assert "folder ball holds other files ('thesis.tex', for one)" in capsys.readouterr().err
    assert painted.case is None


@pytest.mark.parametrize(
    ("out", "sentence"),
    [
        ("file", "file is a file, not a folder"),
        ("file/below/it", "no folder can be made in file"),
        ("x" * 5000, "cannot be used"),
    ],
    ids=["file", "below a file", "long"],
)
def test_a_folder_that_cannot_be_is_refused_before_the_solve(workplace, painted, capsys, out, sentence):
    (workplace / "file").write_text("")
    assert main([*RUN, "-q", "--out", out]) == 2
    error = capsys.readouterr().err
    assert sentence in error
    assert len(error) < 500
    assert painted.case is None


def test_an_empty_folder_and_an_earlier_result_are_used(workplace, painted):
    (workplace / "ball").mkdir()
    assert main(RUN) == 0
    (workplace / "ball" / "my notes.txt").write_text("kept")
    assert main(RUN) == 0
    assert (workplace / "ball" / "my notes.txt").read_text() == "kept"


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["lost.toml"], "there is no case file lost.toml"),
        (["cases"], "is a folder"),
        (["cases/ball.toml", "--target", "5"], "--target is 5; it must lie between 0 and 1"),
        (["cases/ball.toml", "--target", "best"], "--target 'best' is not a plain number or percentage"),
        (["cases/ball.toml", "--max-panels", "3"], "[accuracy] max_panels is 3"),
        (["cases/ball.toml", "--max-panels", "many"], "--max-panels is 'many'; give a whole number"),
        (["cases/ball.toml", "--fast"], "no such option: --fast"),
        (["cases/ball.toml", "another.toml"], "unexpected extra argument"),
        ([], "missing argument"),
    ],
)
def test_wrong_input_is_told_in_one_line_on_stderr(workplace, painted, capsys, arguments, sentence):
    assert main(["solve", *arguments, "--json"]) == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    assert sentence in printed.err
    assert printed.err.startswith("bemescape: ")
    assert printed.err.count("\n") == 1
    assert painted.case is None


def test_a_missing_mesh_is_told_with_the_case(workplace, capsys):
    (workplace / "cases" / "ball.ply").unlink()
    assert main(RUN) == 2
    assert "[surface] file is 'ball.ply', but there is no file" in capsys.readouterr().err
