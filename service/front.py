"""The layers around every request, in one place and in their order.

request id -> host and origin -> token -> route; around them time, metrics, the log and
the answer to whatever went wrong. Plain ASGI, because each layer is paid by every record.
"""

from __future__ import annotations

import itertools
import re
import secrets
import time
import traceback
from collections.abc import Mapping

from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.access import NoRight
from service.logs import log_event
from service.metrics import OTHER_ROUTE
from service.problems import Problem
from service.running import Service

# Paths with their role; None is open to all who reach the service.
ROLE_OF: Mapping[tuple[str, str], str | None] = {
    ("POST", "/records"): "send",
    ("GET", "/health/live"): None,
    ("GET", "/health/ready"): None,
}
_OPEN_PREFIX = "/problems/"
_ACTION_PREFIXES = ("/alerts/", "/sources/")
ROUTES = frozenset(
    (
        "/", "/records", "/alerts", "/actions", "/sources", "/model", "/pruned", "/metrics",
        "/openapi.json", "/health/live", "/health/ready",
    )
)  # fmt: skip
_METHODS = frozenset(("GET", "HEAD", "POST", "PUT", "DELETE", "PATCH", "OPTIONS"))
_REQUEST_ID = re.compile(rb"^[A-Za-z0-9._-]{1,64}$")
_LOOPBACK_HOSTS = ("localhost", "127.0.0.1", "::1")
_FIXED_HEADERS = [
    (b"x-content-type-options", b"nosniff"),
    (b"referrer-policy", b"no-referrer"),
    (b"x-frame-options", b"DENY"),
]


class Front:
    """The outermost ASGI app.

    quick: the app of a path that is not sent through the framework, by (method, path).
    """

    def __init__(
        self, app: ASGIApp, service: Service, quick: Mapping[tuple[str, str], ASGIApp]
    ) -> None:
        self.app, self.service, self.quick = app, service, quick
        server = service.settings.server
        names = {*_LOOPBACK_HOSTS, server.host, *server.hosts}
        self.hosts = frozenset(name.lower().strip("[]") for name in names)
        self.any_host = "*" in server.hosts
        self.log_all = service.settings.log.requests == "all"
        self.n_running_max = service.settings.server.n_connections
        self._n_running = 0
        service.writer.n_requests = lambda: self._n_running
        self._prefix = secrets.token_hex(4)
        self._numbers = itertools.count(1)

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Answer one request, or pass the lifespan on."""
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        request = _Request(scope, send, self._request_id(scope))
        scope["state"] = {"request": request.id}
        self._n_running += 1
        try:
            self._let_in(scope)
            app = self.quick.get((scope["method"], scope["path"]), self.app)
            await app(scope, receive, request.send)
        except Problem as problem:
            await request.refuse(problem)
        except Exception as error:  # noqa: BLE001 - the client gets no internals, the log does
            where = traceback.extract_tb(error.__traceback__)[-1]
            log_event(
                "fault",
                request=request.id,
                error=type(error).__name__,
                detail=str(error),
                place=f"{where.filename.rsplit('/', 1)[-1]}:{where.lineno}",
            )
            await request.refuse(Problem("internal", "the request could not be answered"))
        finally:
            self._n_running -= 1
        self._count(scope, request)

    def _request_id(self, scope: Scope) -> str:
        for name, value in scope["headers"]:
            if name == b"x-request-id" and _REQUEST_ID.fullmatch(value):
                return str(value.decode())
        return f"{self._prefix}-{next(self._numbers):x}"

    def _let_in(self, scope: Scope) -> None:
        host = origin = authorization = None
        for name, value in scope["headers"]:
            if name == b"host":
                host = value
            elif name == b"origin":
                origin = value
            elif name == b"authorization":
                authorization = value
        if not self.any_host:
            self._check_host(host)
        if origin is not None and origin.partition(b"://")[2] != host:
            raise Problem("foreign-origin", "the request comes from a page of another origin")
        key = (scope["method"], scope["path"])
        if self._n_running > self.n_running_max and not key[1].startswith("/health/"):
            raise Problem("overload", f"{self.n_running_max} requests are being answered already")
        role = ROLE_OF.get(key, "operate" if key[0] not in ("GET", "HEAD") else "read")
        if role is not None and not key[1].startswith(_OPEN_PREFIX):
            text = None if authorization is None else authorization.decode("latin-1")
            try:
                # Whoever acts on an alert is kept with the action.
                scope["state"]["by"] = self.service.tokens.check(text, role) or "local"
            except NoRight as refusal:
                scope["state"]["by"] = refusal.by
                raise

    def _check_host(self, host: bytes | None) -> None:
        # A page that points its own name at this address would else read as if it were local.
        text = (host or b"").decode("latin-1").lower()
        name = text[1 : text.find("]")] if text.startswith("[") else text.rpartition(":")[0] or text
        if name not in self.hosts:
            raise Problem(
                "bad-host", f"the Host header says {name[:60]!r}, no name of this service"
            )

    def _count(self, scope: Scope, request: _Request) -> None:
        path, method = scope["path"], scope["method"]
        seconds = time.perf_counter() - request.started
        route = path if path in ROUTES else _action_route(scope)
        if method not in _METHODS:
            method = OTHER_ROUTE
        self.service.metrics.request_done(route, method, request.status, seconds)
        # Refusals inside the framework or a stream leave their kind with the request.
        problem = request.problem or scope["state"].get("problem")
        if self.log_all or request.status >= 400 or problem:
            log_event(
                "request",
                request=request.id,
                method=method,
                route=route,
                status=request.status,
                problem=problem,
                by=scope["state"].get("by"),
                seconds=round(seconds, 6),
            )


def _action_route(scope: Scope) -> str:
    """Return the pattern of an action's path: a label a path would be without end."""
    pattern = getattr(scope.get("route"), "path_format", "")
    return pattern if pattern.startswith(_ACTION_PREFIXES) else OTHER_ROUTE


class _Request:
    """One request's id, its start, and how its answer went out."""

    __slots__ = ("_send", "id", "is_head", "problem", "started", "status")

    def __init__(self, scope: Scope, send: Send, request_id: str) -> None:
        self._send = send
        self.id = request_id
        self.is_head = scope["method"] == "HEAD"
        self.started = time.perf_counter()
        self.status = 0
        self.problem: str | None = None

    async def send(self, message: Message) -> None:
        """Pass a message on, with the headers that every answer has."""
        if message["type"] == "http.response.start":
            self.status = message["status"]
            headers = list(message["headers"])
            headers += _FIXED_HEADERS
            headers.append((b"x-request-id", self.id.encode()))
            message = {**message, "headers": headers}
        await self._send(message)

    async def refuse(self, problem: Problem) -> None:
        """Answer with a problem, unless an answer is already on its way."""
        self.problem = problem.kind
        if self.status:
            return
        body = problem.as_bytes()
        headers = [(n.encode(), v.encode()) for n, v in problem.headers().items()]
        headers.append((b"content-length", str(len(body)).encode()))
        await self.send(
            {"type": "http.response.start", "status": problem.status, "headers": headers}
        )
        await self.send({"type": "http.response.body", "body": b"" if self.is_head else body})
