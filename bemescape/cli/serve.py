"""`bemescape serve`: the page and the HTTP service."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from bemescape.errors import SettingsError

__all__ = ["serve"]


def serve(
    *,
    host: Annotated[str, typer.Option(help="Address to listen at; other than loopback needs tokens.")] = "127.0.0.1",
    port: Annotated[int, typer.Option(min=0, max=65535, help="Port; 0 takes a free one.")] = 8000,
    data: Annotated[
        Path | None, typer.Option(help="Folder of the database and files. Default: the user's data folder.")
    ] = None,
    scheduler: Annotated[
        str | None, typer.Option(help="A dask scheduler that runs already, like tcp://10.0.0.5:8786.")
    ] = None,
    token_file: Annotated[Path | None, typer.Option(help="Private file with one token a line: name token.")] = None,
    slots: Annotated[int, typer.Option(min=1, max=256, help="Runs that compute at a time.")] = 2,
    keep_days: Annotated[
        float | None, typer.Option(min=0.0, help="Delete runs this long after they ended. Default: keep them.")
    ] = None,
    quota_gb: Annotated[float, typer.Option(min=0.001, help="What one token may keep, in GB.")] = 20.0,
    second_opinion: Annotated[
        bool,
        typer.Option("--second-opinion/--no-second-opinion", help="Cross-check finished runs while nothing waits."),
    ] = True,
) -> int:
    """Serve the page and the HTTP interface: upload, place openings, solve, inspect, compare.

    On 127.0.0.1 everyone on this machine may use it. Stop it with Ctrl-C; runs that compute are begun again.
    """
    from bemescape.service.server import serve as serve_forever
    from bemescape.service.settings import Limits, Settings, read_tokens

    if scheduler is not None and "://" not in scheduler:
        raise SettingsError(f"--scheduler is {scheduler[:80]!r}; give an address like tcp://10.0.0.5:8786")
    serve_forever(
        Settings(
            data=data if data is not None else _data_folder(),
            host=host,
            port=port,
            tokens={} if token_file is None else read_tokens(token_file),
            scheduler=scheduler,
            slots=slots,
            second_opinion=second_opinion,
            limits=Limits(keep_days=keep_days, owner_bytes=int(quota_gb * 1e9)),
        )
    )
    return 0


def _data_folder() -> Path:
    from platformdirs import user_data_path

    return user_data_path("bemescape") / "service"
