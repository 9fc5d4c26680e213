"""`bemescape warm`: compile everything once."""

from __future__ import annotations

from typing import Annotated

import typer

__all__ = ["warm"]


def warm(
    *,
    quiet: Annotated[bool, typer.Option("--quiet", help="No progress.")] = False,
) -> int:
    """Compile everything once, so that no later solve has to wait for it."""
    from bemescape.cli.progress import reporting
    from bemescape.warm import warm_up

    with reporting(quiet=quiet) as progress:
        seconds = warm_up(progress)
    typer.echo(f"compiled and kept on disk; this took {seconds:.0f} s")
    return 0
