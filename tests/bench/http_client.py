"""A lean client: a few connections that send prepared requests and count answers.

It costs a few microseconds a request, so that what is measured is the server.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field


@dataclass
class Result:
    """Answers by status, seconds of the whole run, and of each answer."""

    seconds: float
    statuses: dict[int, int] = field(default_factory=dict)
    latencies_s: list[float] = field(default_factory=list)

    @property
    def n_answers(self) -> int:
        """How many answers came."""
        return sum(self.statuses.values())

    def percentile(self, share: float) -> float:
        """Return a percentile of the seconds of an answer."""
        ordered = sorted(self.latencies_s)
        return ordered[min(len(ordered) - 1, int(share * len(ordered)))]


class _Connection(asyncio.Protocol):
    def __init__(self, requests: Iterator[bytes], result: Result) -> None:
        self.requests, self.result = requests, result
        self.done: asyncio.Future[None] = asyncio.get_running_loop().create_future()
        self.gap_s = 0.0
        self._head = b""
        self._left = 0
        self._sent_at = 0.0

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        assert isinstance(transport, asyncio.Transport)
        self.transport = transport
        self._next()

    def _next(self) -> None:
        request = next(self.requests, None)
        if request is None:
            self.transport.close()
            if not self.done.done():
                self.done.set_result(None)
            return
        self._sent_at = time.perf_counter()
        self.transport.write(request)

    def data_received(self, data: bytes) -> None:
        if self._left:
            self._left -= len(data)
        else:
            self._head += data
            end = self._head.find(b"\r\n\r\n")
            if end < 0:
                return
            head = self._head[:end].lower()
            status = int(head[9:12])
            at = head.index(b"content-length:") + 15
            length = int(head[at : head.find(b"\r", at) if head.find(b"\r", at) > 0 else None])
            self.result.statuses[status] = self.result.statuses.get(status, 0) + 1
            self._left = length - (len(self._head) - end - 4)
            self._head = b""
        if self._left <= 0:
            self._left = 0
            self.result.latencies_s.append(time.perf_counter() - self._sent_at)
            if self.gap_s:
                asyncio.get_running_loop().call_later(self.gap_s, self._next)
            else:
                self._next()

    def connection_lost(self, exc: Exception | None) -> None:
        if not self.done.done():
            self.done.set_exception(exc or ConnectionError("the server closed the connection"))


def post(port: int, path: str, body: bytes) -> bytes:
    """Return the bytes of one POST request with JSON."""
    head = (
        f"POST {path} HTTP/1.1\r\nHost: 127.0.0.1:{port}\r\nContent-Type: application/json\r\n"
        f"Content-Length: {len(body)}\r\n\r\n"
    )
    return head.encode() + body


async def _run(port: int, requests: Sequence[bytes], n_connections: int, gap_s: float) -> Result:
    loop = asyncio.get_running_loop()
    queue = iter(requests)
    result = Result(0.0)
    started = time.perf_counter()
    connections = []
    for _ in range(n_connections):
        _, protocol = await loop.create_connection(
            lambda: _Connection(queue, result), "127.0.0.1", port
        )
        protocol.gap_s = gap_s
        connections.append(protocol)
    await asyncio.gather(*(connection.done for connection in connections))
    result.seconds = time.perf_counter() - started
    return result


def run(port: int, requests: Sequence[bytes], n_connections: int, gap_s: float = 0.0) -> Result:
    """Send every request once over some connections; gap_s: pause of each between two."""
    return asyncio.run(_run(port, requests, n_connections, gap_s))
