"""The program `bemescape`: what all commands share, and what an error becomes.

Nothing heavy is imported here or at the top of a command's file, so that `--help` answers at once.
"""

from __future__ import annotations

import contextlib
import io
import sys
from collections.abc import Sequence
from typing import Annotated

import typer

from bemescape.cli.check import check
from bemescape.cli.compare import compare
from bemescape.cli.explore import explore
from bemescape.cli.progress import Stopped
from bemescape.cli.serve import serve
from bemescape.cli.solve import solve
from bemescape.cli.study import study
from bemescape.cli.view import view
from bemescape.cli.warm import warm
from bemescape.errors import AccuracyError, ConvergenceError, EscapeError

__all__ = ["app", "main"]

STOPPED = 130
#: What typer raises for a wrong command line; the class has no public name of its own.
_CommandLineError: type[Exception] = next(
    kind for kind in typer.BadParameter.__mro__ if kind.__name__ == "ClickException" and issubclass(kind, Exception)
)

app = typer.Typer(
    name="bemescape",
    add_completion=False,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    epilog="Exit codes: 0 done, 1 the answer is no, 2 wrong input, 130 stopped.",
)
app.command()(check)
app.command()(solve)
app.command()(explore)
app.command()(study)
app.command()(compare)
app.command()(serve)
app.command()(view)
app.command()(warm)


def _print_version(wanted: bool) -> None:  # noqa: FBT001 (typer calls it so)
    if wanted:
        from importlib.metadata import version

        typer.echo(f"bemescape {version('bemescape')}")
        raise typer.Exit


@app.callback()
def _program(
    *,
    version: Annotated[
        bool,
        typer.Option("--version", callback=_print_version, is_eager=True, help="Print the version and leave."),
    ] = False,
) -> None:
    """Mean escape times of diffusing molecules from measured 3D shapes, by boundary elements."""


def main(argv: Sequence[str] | None = None) -> int:
    """Run the program.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments after the program's name; those of the process by default.

    Returns
    -------
    int
        The exit code: 0 done, 1 the answer is "no", 2 wrong input, 130 stopped by Ctrl-C.
    """
    _never_fail_on_a_letter()
    arguments = list(sys.argv[1:] if argv is None else argv)
    command = typer.main.get_command(app)
    try:
        code = command.main(arguments, prog_name="bemescape", standalone_mode=False)
    except EscapeError as error:
        _complain(str(error))
        return 1 if isinstance(error, ConvergenceError | AccuracyError) else 2
    except Stopped as stop:
        _complain(f"stopped; {stop}")
        return STOPPED
    except (KeyboardInterrupt, typer.Abort):
        code = STOPPED
    except _CommandLineError as error:
        _complain(_usage_sentence(error, arguments))
        return 2
    if code == STOPPED:  # also what typer makes of Ctrl-C
        _complain("stopped; nothing was written")
    return code if isinstance(code, int) else 0


def _complain(message: str) -> None:
    typer.echo(f"bemescape: {' '.join(message.split())}", err=True)


def _usage_sentence(error: Exception, arguments: Sequence[str]) -> str:
    message = str(getattr(error, "format_message", error.__str__)()).strip().rstrip(".")
    known = {command.name or command.callback.__name__ for command in app.registered_commands if command.callback}
    place = f"{arguments[0]} " if arguments and arguments[0] in known else ""
    return f"{message[:1].lower()}{message[1:]}; see bemescape {place}--help"


def _never_fail_on_a_letter() -> None:
    """Print µ as an escape where the terminal cannot show it, instead of failing."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            with contextlib.suppress(ValueError, OSError):
                stream.reconfigure(errors="backslashreplace")


if __name__ == "__main__":
    sys.exit(main())
