"""The composition root of the HTTP interface: which part answers what, and what every request passes first."""

from __future__ import annotations

import asyncio
from collections.abc import AsyncIterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import asynccontextmanager
from typing import Any, Final

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from fastapi.routing import APIRoute
from starlette.exceptions import HTTPException
from starlette.middleware import Middleware
from starlette.responses import Response

from service.api import events, health, jobs, results, scans
from service.doors import BodyLimit, Faults, HeadAsGet, HostCheck, TokenCheck
from service.openapi import describe
from service.provenance import fallow_version
from service.refusals import from_http, from_validation
from service.services import Services
from service.settings import ServiceSettings

ROUTERS = (scans.router, jobs.router, events.router, results.router, health.router)
#: Threads for what waits for a database: many, so that calls that wait to write do not hold up those that read.
_THREADS: Final = 64


def create_app(settings: ServiceSettings) -> FastAPI:
    """Build the application; folders and databases are opened when it starts, and closed when it ends.

    Parameters
    ----------
    settings : ServiceSettings

    Returns
    -------
    FastAPI
        `state.services` holds the parts while it runs.
    """

    @asynccontextmanager
    async def lifespan(app: FastAPI) -> AsyncIterator[None]:
        threads = ThreadPoolExecutor(_THREADS, thread_name_prefix="fallow-call")
        asyncio.get_running_loop().set_default_executor(threads)
        services = await asyncio.to_thread(Services, settings)
        app.state.services = services
        try:
            yield
        finally:
            services.watch.close()
            await asyncio.to_thread(services.close)

    app = FastAPI(
        title="Fallow",
        version=fallow_version(),
        lifespan=lifespan,
        # The interactive pages would fetch scripts from elsewhere.
        docs_url=None,
        redoc_url=None,
        redirect_slashes=False,
        middleware=[
            Middleware(Faults),
            Middleware(HostCheck, hosts=settings.hosts),
            Middleware(TokenCheck),
            Middleware(BodyLimit, unbounded="/v1/scans"),
            Middleware(HeadAsGet),
        ],
        exception_handlers={RequestValidationError: _refuse_validation, HTTPException: _refuse_http},
    )
    for router in ROUTERS:
        app.include_router(router)
    describe(app)
    return app


async def _refuse_validation(request: Request, error: Any) -> Response:
    raise from_validation(error)


async def _refuse_http(request: Request, error: Any) -> Response:
    routes = [route for router in ROUTERS for route in router.routes if isinstance(route, APIRoute)]
    raise from_http(request.url.path, request.method, error, routes)
