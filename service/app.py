"""The composition root: settings, databases, queue, routers. No logic lives here."""

import secrets
from collections.abc import AsyncIterator, Awaitable, Callable
from contextlib import asynccontextmanager

import structlog
from fastapi import FastAPI, Request, Response
from starlette.concurrency import run_in_threadpool
from starlette.middleware.cors import CORSMiddleware

from service import __version__
from service.api import (
    alerts,
    baselines,
    crops,
    diary,
    health,
    holdings,
    imports,
    indices,
    jobs,
    keys,
    notices,
    observations,
    overview,
    parcels,
    rehearsals,
    rules,
    scene_content,
    scenes,
    seasons,
    sensors,
    series,
    summaries,
    webhooks,
)
from service.api.context import Context
from service.api.problems import answer_problems
from service.errors import Unavailable
from service.jobs.resources import Resources
from service.jobs.worker import Worker
from service.settings import Settings
from service.store.sessions import Sessions, migrate, open_engine
from service.tiles.archive import Archive
from service.tiles.assets import Assets
from service.tiles.plans import Plans

_ROUTERS = (
    keys,
    parcels,
    holdings,
    imports,
    jobs,
    seasons,
    crops,
    scenes,
    scene_content,
    observations,
    indices,
    sensors,
    series,
    baselines,
    overview,
    # Before alerts: its address is not the id of one.
    summaries,
    alerts,
    diary,
    notices,
    rehearsals,
    rules,
    webhooks,
    health,
)


def open_resources(settings: Settings) -> Resources:
    """Open the data folder and the database, making and migrating what is not there."""
    try:
        settings.data.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        detail = f"The data folder can't be made: {error.strerror}."
        raise Unavailable("not-ready", detail) from error
    engine = open_engine(settings.app_url)
    migrate(engine, lock_folder=settings.data)
    return Resources(
        settings=settings,
        sessions=Sessions(engine),
        archive=Archive(settings.data / "files"),
        plans=Plans(settings.data / "plans", limit_bytes=settings.plan_limit_bytes),
    )


def create_app(settings: Settings) -> FastAPI:
    """Return the application: the API, with the worker embedded."""
    work = open_resources(settings)
    worker = Worker(work)

    @asynccontextmanager
    async def lifespan(_app: FastAPI) -> AsyncIterator[None]:
        await run_in_threadpool(worker.start)
        try:
            yield
        finally:
            await run_in_threadpool(worker.stop)
            work.sessions.engine.dispose()

    app = FastAPI(
        title="Furrowlight",
        version=__version__,
        summary="Vegetation and water indices of field parcels, scene by scene. A screening "
        "aid: check on the ground before acting; follow local rules and licensed advice.",
        docs_url=None,
        redoc_url=None,
        lifespan=lifespan,
    )
    app.state.claim = worker.claim
    app.state.context = Context(work=work, queue=worker, assets=Assets(settings))
    for module in _ROUTERS:
        app.include_router(module.router)
    answer_problems(app)
    app.middleware("http")(_with_request_id)
    if settings.allowed_origins:
        app.add_middleware(
            CORSMiddleware,
            allow_origins=settings.allowed_origins,
            allow_methods=["*"],
            allow_headers=["*"],
            expose_headers=["ETag", "Link", "Location", "Retry-After", "X-Request-Id"],
        )
    return app


async def _with_request_id(
    request: Request, proceed: Callable[[Request], Awaitable[Response]]
) -> Response:
    """Name each request, for the log and for whoever reports a fault."""
    request.state.request_id = f"req_{secrets.token_hex(8)}"
    with structlog.contextvars.bound_contextvars(request_id=request.state.request_id):
        response = await proceed(request)
    response.headers["X-Request-Id"] = request.state.request_id
    return response
