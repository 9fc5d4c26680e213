"""`create_app`: the parts put together."""

from __future__ import annotations

from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from importlib.resources import files
from typing import Any

from fastapi import FastAPI
from fastapi.openapi.utils import get_openapi
from starlette.staticfiles import StaticFiles

from bemescape.results.summary import CAUTION
from bemescape.service.api import runs, session, studies, surfaces
from bemescape.service.api.parts import Service
from bemescape.service.crew import Crew
from bemescape.service.events import Hub
from bemescape.service.jobs import Jobs
from bemescape.service.orders import RunOrder
from bemescape.service.problems import install_handlers
from bemescape.service.records import finite
from bemescape.service.security import Guard, Keys, SizeLimit
from bemescape.service.settings import Settings
from bemescape.service.store import Store
from bemescape.version import __version__

__all__ = ["create_app"]


def create_app(settings: Settings, crew: Crew | None = None) -> FastAPI:
    """The service as an ASGI application; it holds its data folder from now until it stops.

    Parameters
    ----------
    settings : Settings
    crew : Crew, optional
        Who does the work; by default dask workers, as the settings say.

    Raises
    ------
    SettingsError
        The data folder is used by another service or cannot be written.
    """
    store = Store(settings.data, settings.limits)
    crew, hub = crew or Crew(settings), Hub(settings.limits.streams)
    jobs = Jobs(settings, store, crew, hub)
    keys = Keys(settings.tokens)

    @asynccontextmanager
    async def lifespan(_app: FastAPI) -> AsyncIterator[None]:
        store.recover()
        crew.start(jobs.on_progress)
        jobs.start()
        try:
            yield
        finally:
            jobs.close()
            crew.close()
            store.close()

    app = FastAPI(
        title="bemescape",
        version=__version__,
        description=f"Escape times of diffusing molecules from measured 3D shapes. {CAUTION}",
        docs_url=None,
        redoc_url=None,
        openapi_url="/api/openapi.json",
        lifespan=lifespan,
    )
    app.state.service = Service(settings, keys, store, crew, hub, jobs)
    install_handlers(app)
    app.add_middleware(SizeLimit, upload_bytes=settings.limits.upload_bytes)
    app.add_middleware(Guard, settings=settings, keys=keys)
    for module in (session, surfaces, runs, studies):
        app.include_router(module.router, prefix="/api")
    app.mount("/", StaticFiles(directory=str(files("bemescape.service.page")), html=True), name="page")
    app.openapi = lambda: _description(app)  # type: ignore[method-assign]
    return app


def _description(app: FastAPI) -> dict[str, Any]:
    """The OpenAPI description, with the model of an order, which a route reads as a case file is read."""
    if app.openapi_schema is None:
        description = get_openapi(title=app.title, version=app.version, description=app.description, routes=app.routes)
        order = RunOrder.model_json_schema(ref_template="#/components/schemas/{model}")
        schemas = description["components"]["schemas"]
        schemas.update(order.pop("$defs"))
        schemas["RunOrder"] = order
        description["components"]["securitySchemes"] = {"token": {"type": "http", "scheme": "bearer"}}
        description["security"] = [{"token": []}]
        # A permeability is infinite by default, which JSON cannot say.
        app.openapi_schema = finite(description)
    return app.openapi_schema
