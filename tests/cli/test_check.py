"""`bemescape check`: state, healing, verdict."""

import json

import numpy as np
import pytest
import trimesh

from bemescape.cli.main import main


def test_a_closed_surface_can_be_solved_as_it_is(workplace, capsys):
    assert main(["check", "cases/ball.ply", "--unit", "nm"]) == 0
    printed = capsys.readouterr()
    assert "320 faces" in printed.out
    assert "box 200 nm × 200 nm × 200 nm" in printed.out
    assert printed.out.rstrip().endswith("can be solved as it is")
    assert "reading: ball.ply" in printed.err


def test_a_hole_is_reported_with_what_healing_would_change(workplace, capsys):
    ball = trimesh.load("cases/ball.ply")
    trimesh.Trimesh(ball.vertices, ball.faces[1:]).export("holed.ply")
    before = (workplace / "holed.ply").read_bytes()
    assert main(["check", "holed.ply", "--unit", "4 nm, 4 nm, 40 nm", "-q"]) == 0
    printed = capsys.readouterr()
    assert "3 open edges" in printed.out
    assert 'healing "auto" would change\n  closed hole' in printed.out
    assert printed.out.rstrip().endswith("can be solved after healing")
    assert printed.err == ""
    assert (workplace / "holed.ply").read_bytes() == before


def test_an_open_sheet_gives_the_answer_no_with_the_reason(workplace, capsys):
    ball = trimesh.load("cases/ball.ply")
    upper = ball.faces[ball.triangles_center[:, 2] > 0]
    trimesh.Trimesh(ball.vertices, upper).export("bowl.ply")
    assert main(["check", "bowl.ply", "--unit", "nm", "-q"]) == 1
    last = capsys.readouterr().out.rstrip().splitlines()[-1]
    assert last.startswith("cannot be solved: ")
    assert "open" in last or "hole" in last


def test_json_is_alone_on_stdout_and_says_the_same(workplace, capsys):
    assert main(["check", "cases/ball.ply", "--unit", "4 nm", "--json"]) == 0
    printed = capsys.readouterr()
    report = json.loads(printed.out)
    assert report["solvable"] is True
    assert report["healing"] is None
    assert report["reason"] is None
    assert report["health"]["faces"] == 320
    np.testing.assert_allclose(report["unit_um"], 0.004)


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["cases/ball.ply"], "--unit is missing"),
        (["cases/ball.ply", "--unit", "voxel"], "unit of the file 'voxel'"),
        (["cases/ball.ply", "--unit", "nm, nm"], "2 entries"),
        (["lost.ply", "--unit", "nm"], "no file lost.ply"),
        (["cases", "--unit", "nm"], "is a folder"),
        (["cases/ball.toml", "--unit", "nm"], "ball.toml"),
    ],
)
def test_wrong_input_is_told_in_one_line_on_stderr(workplace, capsys, arguments, sentence):
    assert main(["check", *arguments, "--json", "-q"]) == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    assert sentence in printed.err
    assert printed.err.startswith("bemescape: ")
    assert printed.err.count("\n") == 1


def test_stopping_says_that_nothing_was_written(workplace, capsys, monkeypatch):
    def stop(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr("bemescape.surface.read.read_unhealed", stop)
    assert main(["check", "cases/ball.ply", "--unit", "nm"]) == 130
    assert capsys.readouterr().err.strip() == "bemescape: stopped; nothing was written"
