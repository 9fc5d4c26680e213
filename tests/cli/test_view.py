"""`bemescape view`: window or picture. Drawing itself is tested with the pictures."""

import pytest

from bemescape.cli.main import main
from bemescape.viz import pictures, window


@pytest.fixture
def saved(workplace, painted, capsys):
    main(["solve", "cases/ball.toml", "--no-pictures", "-q"])
    capsys.readouterr()
    return workplace / "ball"


def test_a_picture_is_rendered_with_the_view_and_cut_asked_for(saved, capsys, monkeypatch):
    calls = []
    monkeypatch.setattr(pictures, "render_png", lambda result, path, **named: calls.append((path.name, named)))
    assert main(["view", "ball", "--png", "a.png"]) == 0
    assert main(["view", "ball", "--png", "b.PNG", "--view", "top", "--cut"]) == 0
    assert calls == [
        ("a.png", {"view": "front", "cut": False}),
        ("b.PNG", {"view": "top", "cut": True}),
    ]
    assert capsys.readouterr().out == "a.png\nb.PNG\n"


def test_without_a_file_the_desktop_window_opens(saved, monkeypatch):
    calls = []
    monkeypatch.setattr(window, "open_window", lambda result, **named: calls.append((result.name, named)))
    assert main(["view", "ball", "--view", "side"]) == 0
    assert calls == [("ball", {"view": "side"})]


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["lost"], "there is no result folder lost"),
        (["cases"], "cases is not a complete result"),
        (["cases/ball.toml"], "is a file; give the folder"),
        (["ball", "--png", "a.jpg"], "--png is a.jpg; give a file that ends in .png"),
        (["ball", "--png", "lost/a.png"], "in an existing folder"),
        (["ball", "--cut"], "--cut needs --png"),
        (["ball", "--view", "back"], "'back' is not one of"),
    ],
)
def test_wrong_input_is_told_in_one_line_on_stderr(saved, capsys, arguments, sentence):
    assert main(["view", *arguments]) == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    assert sentence in printed.err
    assert printed.err.count("\n") == 1
