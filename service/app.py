"""The application factory: routes, handlers, layers and lifespan, put together here."""

from __future__ import annotations

from collections.abc import AsyncIterator, Mapping
from contextlib import asynccontextmanager
from importlib.metadata import PackageNotFoundError, version
from typing import Any

import sqlalchemy as sa
from fastapi import FastAPI
from fastapi.exceptions import RequestValidationError
from starlette.exceptions import HTTPException
from starlette.requests import Request
from starlette.responses import Response
from starlette.types import ASGIApp

from service.front import ROUTES, Front
from service.logs import log_event
from service.nearest import nearest_of
from service.openapi import describe
from service.page import page_router
from service.problems import Problem
from service.routes_alerts import alerts_router
from service.routes_health import health_router
from service.routes_read import read_router
from service.routes_records import RecordsEndpoint
from service.running import Service

# What goes past the framework: (path, method).
QUICK = (("/records", "POST"),)
_KIND_OF_STATUS = {404: "not-found", 405: "bad-method"}


def create_app(service: Service) -> ASGIApp:
    """Return the ASGI app over an opened service; its lifespan starts and stops it."""

    @asynccontextmanager
    async def lifespan(_app: FastAPI) -> AsyncIterator[None]:
        await service.start()
        yield
        await service.stop()

    app = FastAPI(
        title="oddbranch",
        version=_version(),
        lifespan=lifespan,
        docs_url=None,
        redoc_url=None,
        openapi_url=None,
    )
    app.include_router(page_router(service))
    app.include_router(read_router(service))
    app.include_router(alerts_router(service))
    app.include_router(health_router(service))
    _add_documents(app, service)
    _add_handlers(app)
    records = RecordsEndpoint(service)
    return Front(app, service, {(method, path): records for path, method in QUICK})


def _version() -> str:
    try:
        return version("oddbranch")
    except PackageNotFoundError:
        return "0"


def _add_documents(app: FastAPI, service: Service) -> None:
    @app.get("/openapi.json", include_in_schema=False)
    async def openapi() -> dict[str, Any]:
        """Answer the description; it names the channels of the model in use."""
        return describe(app, service)


def _add_handlers(app: FastAPI) -> None:
    @app.exception_handler(Problem)
    async def on_problem(request: Request, problem: Exception) -> Response:
        assert isinstance(problem, Problem)
        return _refusal(request, problem)

    @app.exception_handler(Exception)
    async def on_fault(request: Request, _error: Exception) -> Response:
        # The framework raises it again after this answer, and the front logs it.
        return _refusal(request, Problem("internal", "the request could not be answered"))

    @app.exception_handler(sa.exc.DBAPIError)
    async def on_store(request: Request, error: Exception) -> Response:
        log_event("store_read_failed", error=type(error).__name__, detail=str(error))
        return _refusal(request, Problem("store-away", "the store does not answer"))

    @app.exception_handler(RequestValidationError)
    async def on_bad_query(request: Request, error: Exception) -> Response:
        assert isinstance(error, RequestValidationError)
        first = error.errors()[0]
        name, words = str(first["loc"][-1]), str(first["msg"])
        if first["type"] == "string_pattern_mismatch" and name in ("id", "alert"):
            words = "an alert's id is 16 digits from 0 to f; GET /alerts lists them"
        return _refusal(request, Problem("bad-query", f"{name}: {words}"))

    @app.exception_handler(HTTPException)
    async def on_http(request: Request, error: Exception) -> Response:
        assert isinstance(error, HTTPException)
        path = request.url.path
        headers = {name.lower(): value for name, value in (error.headers or {}).items()}
        if error.status_code == 405:
            # A path may be served by several routes; the framework names the first one's.
            quick = [method for quick_path, method in QUICK if quick_path == path]
            if quick:
                headers["allow"] = ", ".join(["GET", *quick])
        kind = _KIND_OF_STATUS.get(error.status_code, "bad-header")
        response = _refusal(request, Problem(kind, _words_of(error, request.method, path, headers)))
        response.headers.update(headers)
        return response


def _words_of(error: HTTPException, method: str, path: str, headers: Mapping[str, str]) -> str:
    """Return what the framework's refusal means here."""
    if error.status_code == 404:
        near = nearest_of(path[:60], sorted(ROUTES))
        return f"there is nothing at {path[:60]!r}" + (f"; is {near} meant?" if near else "")
    if error.status_code == 405:
        allowed = headers.get("allow", "").replace(", ", " or ")
        return f"{method[:20]} is not answered at {path[:60]!r}; use {allowed}"
    return str(error.detail)


def _refusal(request: Request, problem: Problem) -> Response:
    # The front writes the log, and sees only the status of this answer.
    request.scope["state"]["problem"] = problem.kind
    return Response(problem.as_bytes(), status_code=problem.status, headers=problem.headers())
