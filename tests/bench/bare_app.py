"""What the service is measured against: endpoints that do nothing with what they read."""

from __future__ import annotations

import socket
import sys
from typing import Any

import orjson
import uvicorn
from fastapi import FastAPI, Request, Response
from pydantic import BaseModel

app = FastAPI()


class Record(BaseModel):
    """A record as a client would describe it."""

    source: str
    time: str
    readings: dict[str, float | str | None]


_SCORE: dict[str, Any] = {
    "source": "mill-lane-2", "time": "2026-12-01T04:00:10Z", "model": "0123456789abcdef",
    "member": "own", "surprise": 31.2, "excess": 18.4, "sustained": 2.9, "missing": ["speed"],
    "unknown": [], "suspect": {
        "channel": "flow", "surprise": 17.0, "reading": 241.3,
        "expected": {"low": 268.0, "high": 281.0, "best": 274.0}, "neighbours": ["power"],
    }, "alert": None,
}  # fmt: skip
_SCORES = [_SCORE] * 1000


@app.post("/one")
async def one(record: Record) -> dict[str, Any]:
    """Check one body and answer a constant."""
    return _SCORE


@app.post("/many")
async def many(request: Request) -> Response:
    """Parse a body with orjson and answer a constant list."""
    orjson.loads(await request.body())
    return Response(orjson.dumps(_SCORES), media_type="application/json")


if __name__ == "__main__":
    listener = socket.create_server(("127.0.0.1", 0))
    sys.stdout.write(f"http://127.0.0.1:{listener.getsockname()[1]}\n")
    sys.stdout.flush()
    config = uvicorn.Config(
        app, loop="uvloop", http="httptools", access_log=False, log_level="warning"
    )
    uvicorn.Server(config).run(sockets=[listener])
