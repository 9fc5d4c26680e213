"""The service as a process: uvicorn around the app."""

from __future__ import annotations

import logging
import socket

import uvicorn

from bemescape.errors import SettingsError
from bemescape.service.app import create_app
from bemescape.service.settings import Settings

__all__ = ["serve"]


def serve(settings: Settings) -> None:
    """Serve until stopped.

    Raises
    ------
    SettingsError
        The port is taken, or the data folder cannot be used.
    """
    logging.basicConfig(level=logging.WARNING, format="%(asctime)s %(levelname)s %(name)s: %(message)s")
    logging.getLogger("bemescape.service").setLevel(logging.INFO)
    listener = _listener(settings)
    try:
        app = create_app(settings)
        config = uvicorn.Config(
            app,
            log_level="warning",
            access_log=False,
            server_header=False,
            timeout_keep_alive=30,
            timeout_graceful_shutdown=5,
            limit_concurrency=500,
            h11_max_incomplete_event_size=32 * 1024,
        )
        host = f"[{settings.host}]" if ":" in settings.host else settings.host
        port = listener.getsockname()[1]
        logging.getLogger("bemescape.service").info("the page is at http://%s:%d", host, port)
        uvicorn.Server(config).run(sockets=[listener])
    finally:
        listener.close()


def _listener(settings: Settings) -> socket.socket:
    """Bound before anything else is opened, so that a port that is taken is said at once."""
    family = socket.AF_INET6 if ":" in settings.host else socket.AF_INET
    listener = socket.socket(family, socket.SOCK_STREAM)
    listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
    try:
        listener.bind((settings.host, settings.port))
        listener.listen(512)
    except OSError as error:
        listener.close()
        raise SettingsError(
            f"{settings.host}:{settings.port} cannot be used: {error.strerror or error}; give another --port or --host"
        ) from error
    listener.set_inheritable(False)
    return listener
