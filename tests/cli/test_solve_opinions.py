"""`bemescape solve` with second opinions. The solve is a stand-in; the walkers are real."""

import json
from dataclasses import replace

import pytest

from bemescape.cli.main import main
from bemescape.errors import AccuracyError
from bemescape.results.result import EscapeResult

RUN = ["solve", "cases/ball.toml", "--no-pictures", "--json"]


@pytest.fixture
def summarised(painted, monkeypatch):
    """The stand-in's summary is painted on; with opinions it is the painted one with their notes and checks."""
    from bemescape.results.measures import _opinion
    from bemescape.results.summary import CrossCheckSummary, WalkersSummary

    before = painted.result.summary

    def summary(result):
        checks = before.checks.model_copy(
            update={
                "walkers": _opinion(WalkersSummary, result.walked),
                "crosscheck": _opinion(CrossCheckSummary, result.crosschecked),
            }
        )
        return before.model_copy(update={"checks": checks, "notes": list(result.notes)})

    monkeypatch.setattr(EscapeResult, "summary", property(summary))
    painted.result = replace(painted.result)
    return painted


def test_walkers_that_do_not_agree_are_told_and_change_no_exit_code(workplace, summarised, capsys):
    assert main([*RUN, "--walkers", "300", "--seed", "5"]) == 0
    printed = json.loads(capsys.readouterr().out)
    walkers = printed["checks"]["walkers"]
    # The painted mean belongs to no body.
    assert walkers["agrees"] is False
    assert (walkers["walkers"], walkers["seed"]) == (300, 5)
    assert walkers["statement"].startswith("does NOT agree with 300 walkers")
    assert json.loads((workplace / "ball" / "summary.json").read_text()) == printed


def test_an_opinion_that_cannot_be_had_is_a_note_and_loses_nothing(workplace, summarised, capsys, monkeypatch):
    def fail(self, *, progress):
        raise AccuracyError("the mesh cannot be coarsened below 9000 panels")

    monkeypatch.setattr(EscapeResult, "crosscheck", fail)
    assert main([*RUN, "--crosscheck"]) == 0
    printed = json.loads(capsys.readouterr().out)
    assert printed["checks"]["crosscheck"] is None
    assert printed["notes"][-1] == "no cross-check: the mesh cannot be coarsened below 9000 panels"


def test_stopping_during_an_opinion_keeps_the_numbers(workplace, summarised, capsys, monkeypatch):
    def stop(self, *arguments, **options):
        raise KeyboardInterrupt

    monkeypatch.setattr(EscapeResult, "walkers", stop)
    assert main([*RUN, "--walkers", "300"]) == 130
    assert "the numbers are in ball, second opinions and pictures may be missing" in capsys.readouterr().err
    assert (workplace / "ball" / "summary.json").is_file()


@pytest.mark.parametrize(
    ("options", "told"),
    [
        (["--walkers", "5"], "--walkers is 5; it must lie between 100 and 100000000"),
        (["--walkers", "many"], "--walkers is 'many'; give a whole number, like 100000"),
        (["--walkers", "300", "--seed", "-1"], "--seed is '-1'; give a whole number, like 1"),
    ],
)
def test_wrong_numbers_are_refused_before_the_solve(workplace, painted, capsys, options, told):
    assert main([*RUN, *options]) == 2
    assert told in capsys.readouterr().err
    assert painted.case is None
