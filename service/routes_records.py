"""POST /records: one object, an array, or NDJSON, each answered in kind and in order."""

from __future__ import annotations

from typing import Any
from urllib.parse import parse_qsl

import orjson
from starlette.types import Receive, Scope, Send

from service.answers import batch_answers, problem_of, record_answers
from service.bodies import BodyReader, ClientGone
from service.nearest import nearest_of
from service.pipeline import Job
from service.problems import Problem
from service.running import Service
from service.stream import answer_lines

_SWITCH = {"true": True, "1": True, "false": False, "0": False}
_START: dict[str, Any] = {
    "type": "http.response.start",
    "status": 200,
}


class RecordsEndpoint:
    """The plain ASGI app behind POST /records: no model classes, straight to arrays."""

    def __init__(self, service: Service) -> None:
        self.service = service

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Answer one request; raises Problem for the front to answer."""
        query = scope["query_string"]
        channels = _channels(query) if query else False
        limits = self.service.settings.limits
        reader = BodyReader(self.service, scope, receive, limits.body_mb)
        request = scope["state"]["request"]
        try:
            if reader.is_ndjson:
                await answer_lines(self.service, scope, receive, send, request, channels)
                return
            body = await self._answer(reader, request, channels)
        except ClientGone:
            return
        finally:
            reader.release()
        headers = [
            (b"content-type", b"application/json"),
            (b"content-length", str(len(body)).encode()),
        ]
        await send({**_START, "headers": headers})
        await send({"type": "http.response.body", "body": body})

    async def _answer(self, reader: BodyReader, request: str, channels: bool) -> bytes:
        whole = await reader.whole()
        engine, parser = self.service.models.in_use
        batch, single = parser.body(whole)
        if batch.problems:
            self.service.metrics.refused(len(batch.problems))
            if single:
                raise batch.problems[0]
        if not batch.sources:
            return orjson.dumps([batch.problems[i].as_item(i) for i in range(batch.n_items)])
        outcome = await self.service.writer.submit(Job(batch, engine, request, channels))
        if not single:
            return orjson.dumps(batch_answers(batch, outcome))
        problem = problem_of(outcome, 0)
        if problem:
            raise problem
        return orjson.dumps(record_answers(outcome)[0])


def _channels(query: bytes) -> bool:
    """Return the value of the one parameter; raises Problem for any other."""
    channels = False
    for name, value in parse_qsl(query.decode("latin-1"), keep_blank_values=True):
        if name != "channels":
            near = nearest_of(name, ("channels",))
            raise Problem(
                "bad-query",
                f"parameter {name[:60]!r} is not known here; channels=true is the only one"
                + (", is it meant?" if near else ""),
            )
        if value not in _SWITCH:
            raise Problem("bad-query", f"channels = {value[:60]!r} is neither true nor false")
        channels = _SWITCH[value]
    return channels
