"""The program as a process: start-up, streams, exit codes, Ctrl-C."""

import json
import os
import signal
import subprocess
import sys
import time

import pytest

from bemescape.cli.main import main
from bemescape.cli.progress import PlainLines
from bemescape.progress import ProgressEvent

# typer itself loads pydantic; that is not ours to avoid.
HEAVY = ("numpy", "scipy", "numba", "pint", "trimesh", "pyvista", "vtkmodules", "matplotlib", "rich")


def run(*arguments, cwd=None, **environment):
    return subprocess.run(
        [sys.executable, "-m", "bemescape.cli.main", *arguments],
        capture_output=True,
        cwd=cwd,
        timeout=120,
        env=os.environ | environment,
        check=False,
    )


@pytest.mark.parametrize("arguments", [["--help"], ["solve", "--help"], ["--version"]])
def test_help_answers_without_loading_anything_heavy(arguments):
    code = (
        "import sys; from bemescape.cli.main import main; "
        f"code = main({arguments!r}); "
        f"print([name for name in {HEAVY!r} if name in sys.modules], file=sys.stderr); sys.exit(code)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, timeout=60, check=False)
    assert done.returncode == 0
    assert done.stdout
    assert done.stderr.decode().strip() == "[]"


def test_the_help_states_the_commands_and_the_exit_codes():
    text = run("--help").stdout.decode()
    for part in ("check", "solve", "view", "0 done, 1 the answer is no, 2 wrong input"):
        assert part in text
    assert "target for the error was not met" in " ".join(run("solve", "--help").stdout.decode().split())


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [([], "missing command"), (["slove"], "did you mean 'solve'"), (["--fast"], "no such option: --fast")],
)
def test_a_wrong_command_line_is_one_sentence_and_exit_code_2(capsys, arguments, sentence):
    assert main(arguments) == 2
    error = capsys.readouterr().err
    assert sentence in error.lower()
    assert error.rstrip().endswith("see bemescape --help")
    assert error.count("\n") == 1


def test_json_alone_on_stdout_and_progress_on_stderr_as_a_process(workplace):
    done = run("check", "cases/ball.ply", "--unit", "nm", "--json", cwd=workplace)
    assert done.returncode == 0
    assert json.loads(done.stdout)["solvable"] is True
    assert b"reading" in done.stderr


def test_wrong_input_as_a_process_is_exit_code_2_without_a_traceback(workplace):
    (workplace / "broken.ply").write_bytes(b"ply\nformat ascii 1.0\nelement vertex 99999999999\n")
    for arguments in (
        ["check", "broken.ply", "--unit", "nm"],
        ["solve", "broken.ply"],
        ["view", "broken.ply"],
    ):
        done = run(*arguments, cwd=workplace)
        assert done.returncode == 2
        assert done.stdout == b""
        assert b"Traceback" not in done.stderr


def test_a_terminal_without_greek_letters_gets_an_answer(workplace):
    (workplace / "Σ.ply").write_bytes((workplace / "cases" / "ball.ply").read_bytes())
    done = run("check", "Σ.ply", "--unit", "nm", cwd=workplace, PYTHONIOENCODING="latin-1")
    assert done.returncode == 0
    assert done.stdout.startswith(rb"\u03a3.ply")
    assert b"can be solved as it is" in done.stdout


def test_a_reader_that_leaves_causes_no_traceback(workplace):
    process = subprocess.Popen(
        [sys.executable, "-m", "bemescape.cli.main", "check", "cases/ball.ply", "--unit", "nm"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        cwd=workplace,
    )
    process.stdout.close()
    error = process.stderr.read()
    process.wait(timeout=60)
    process.stderr.close()
    assert b"Traceback" not in error
    assert b"Exception" not in error


@pytest.mark.skipif(sys.platform == "win32", reason="signals are sent differently there")
def test_ctrl_c_ends_a_solve_with_130_and_without_a_traceback(workplace):
    code = """
import signal, sys, time
signal.signal(signal.SIGINT, signal.default_int_handler)  # a run in the background inherits that it is ignored
from bemescape.case import Case
from bemescape.cli.main import main
def endless(self, progress):
    print("working", flush=True)
    time.sleep(60)
Case.solve = endless
sys.exit(main(["solve", "cases/ball.toml"]))
"""
    process = subprocess.Popen(
        [sys.executable, "-c", code], stdout=subprocess.PIPE, stderr=subprocess.PIPE, cwd=workplace
    )
    assert process.stdout.readline() == b"working\n"
    process.send_signal(signal.SIGINT)
    _, error = process.communicate(timeout=30)
    assert process.returncode == 130
    assert error.decode().strip() == "bemescape: stopped; nothing was written"
    assert not (workplace / "ball").exists()


@pytest.mark.skipif(sys.platform == "win32", reason="there is no pseudo-terminal there")
def test_on_a_terminal_progress_is_a_live_line_that_is_cleared(workplace):
    import pty

    main_end, child_end = pty.openpty()
    process = subprocess.Popen(
        [sys.executable, "-m", "bemescape.cli.main", "check", "cases/ball.ply", "--unit", "nm"],
        stdout=subprocess.PIPE,
        stderr=child_end,
        cwd=workplace,
        env=os.environ | {"TERM": "xterm", "COLUMNS": "100"},
    )
    os.close(child_end)
    printed = b""
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline:
        try:
            chunk = os.read(main_end, 4096)
        except OSError:  # the other end was closed
            break
        if not chunk:
            break
        printed += chunk
    os.close(main_end)
    answer, _ = process.communicate(timeout=60)
    assert process.returncode == 0
    assert b"healing" in printed
    assert b"healing" not in printed.rsplit(b"\x1b[2K", 1)[1]  # erased, and nothing after it
    assert printed.rstrip().endswith(b"\x1b[2K"), printed[-200:]
    assert b"\x1b" not in answer


def test_plain_progress_repeats_a_long_stage_only_now_and_then(capsys):
    now = [0.0]
    lines = PlainLines(clock=lambda: now[0])
    for second in range(25):
        now[0] = float(second)
        lines(ProgressEvent("iterating", None, f"residual {second}"))
    lines(ProgressEvent("measuring"))
    lines.close()
    assert capsys.readouterr().err.splitlines() == [
        "iterating: residual 0",
        "iterating: residual 10",
        "iterating: residual 20",
        "iterating: residual 24",
        "measuring",
    ]
