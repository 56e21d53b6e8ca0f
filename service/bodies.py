"""Bodies as they come: bounded before they are buffered, unpacked under a limit."""

from __future__ import annotations

import asyncio
import zlib
from collections.abc import AsyncIterator, Iterator, Mapping

from starlette.types import Receive, Scope

from service.problems import Problem
from service.running import Service

_JSON_TYPES = ("application/json", "")
_NDJSON_TYPE = "application/x-ndjson"
# What is unpacked at once; a small piece of gzip may hold a thousand times its size.
_UNPACK_BYTES = 256 * 1024


class ClientGone(Exception):
    """The client closed the connection before its body was whole."""


class BodyReader:
    """Reads one request's body piece by piece.

    limit_bytes: of the unpacked body. Memory that buffered pieces take is counted in
    `service.n_body_bytes`, so that many large bodies at once are refused in time.
    """

    def __init__(self, service: Service, scope: Scope, receive: Receive, limit_mb: float) -> None:
        self.service, self.receive = service, receive
        self.limit_mb = limit_mb
        self.limit_bytes = int(limit_mb * 1e6)
        self.media_type, self._inflate = _described(scope, self.limit_bytes)
        self._pause_s = service.settings.limits.body_s
        self._n_bytes = 0

    @property
    def is_ndjson(self) -> bool:
        """Whether the body is a stream of lines."""
        return self.media_type == _NDJSON_TYPE

    async def whole(self) -> bytes:
        """Return the whole body; the caller gives its length back to n_body_bytes."""
        message = await self.receive()
        if message["type"] == "http.disconnect":
            raise ClientGone
        if not message.get("more_body") and self._inflate is None:
            body: bytes = message.get("body", b"")
            self._count(len(body))
            self._hold(len(body))
            return body
        pieces = [piece async for piece in self._pieces(message)]
        return b"".join(pieces)

    def _count(self, n_bytes: int) -> None:
        """Count bytes of the unpacked body; raises Problem over the limit."""
        self._n_bytes += n_bytes
        if self._n_bytes > self.limit_bytes:
            key, way_out = (
                ("stream_mb", "send the rest as another one")
                if self.is_ndjson
                else (
                    "body_mb",
                    "send fewer records at once, or stream them as application/x-ndjson",
                )
            )
            raise Problem(
                "too-large",
                f"the body is larger than limits.{key}, {self.limit_mb:g} MB unpacked; {way_out}",
            )

    def _hold(self, n_bytes: int) -> None:
        memory = self.service.settings.limits.memory_mb * 1e6
        if self.service.n_body_bytes + n_bytes > memory:
            raise Problem("overload", "the bodies of other requests fill the memory for bodies")
        self.service.n_body_bytes += n_bytes
        self._held += n_bytes

    _held = 0

    def release(self) -> None:
        """Give the memory of buffered pieces back."""
        self.service.n_body_bytes -= self._held
        self._held = 0

    async def _pieces(self, message: Mapping[str, object]) -> AsyncIterator[bytes]:
        async for piece in self.stream(message):
            self._hold(len(piece))
            yield piece

    async def stream(self, message: Mapping[str, object] | None = None) -> AsyncIterator[bytes]:
        """Yield unpacked pieces as they come; nothing is counted or kept."""
        while True:
            if message is None:
                message = await self._next()
            if message["type"] == "http.disconnect":
                raise ClientGone
            piece = message.get("body", b"")
            assert isinstance(piece, bytes)
            if self._inflate is None:
                if piece:
                    self._count(len(piece))
                    yield piece
            else:
                for unpacked in self._unpacked(piece):
                    yield unpacked
            if not message.get("more_body"):
                break
            message = None
        if self._inflate is not None and not self._inflate.eof:
            raise Problem("bad-encoding", "the gzip data of the body ends before its end")

    async def _next(self) -> dict[str, object]:
        try:
            async with asyncio.timeout(self._pause_s):
                return dict(await self.receive())
        except TimeoutError:
            raise Problem(
                "slow-body", f"nothing more of the body came for {self._pause_s:g} s"
            ) from None

    def _unpacked(self, piece: bytes) -> Iterator[bytes]:
        assert self._inflate is not None
        try:
            while piece:
                if self._inflate.eof:
                    # gzip data may have several members, one after the other.
                    self._inflate = zlib.decompressobj(wbits=31)
                unpacked = self._inflate.decompress(piece, _UNPACK_BYTES)
                if unpacked:
                    self._count(len(unpacked))
                    yield unpacked
                piece = self._inflate.unconsumed_tail or self._inflate.unused_data
        except zlib.error:
            raise Problem("bad-encoding", "the body is not gzip data") from None


def _described(scope: Scope, limit_bytes: int) -> tuple[str, zlib._Decompress | None]:
    """Return media type and unpacker from the headers; raises Problem."""
    media, encoding, length = "", "", ""
    for name, value in scope["headers"]:
        if name == b"content-type":
            media = value.decode("latin-1")
        elif name == b"content-encoding":
            encoding = value.decode("latin-1").strip().lower()
        elif name == b"content-length":
            length = value.decode("latin-1")
    kind, _, parameters = media.partition(";")
    kind = kind.strip().lower()
    if kind not in (*_JSON_TYPES, _NDJSON_TYPE):
        raise Problem(
            "bad-media-type",
            f"Content-Type {kind[:60]!r} is not taken here; send application/json or "
            "application/x-ndjson (with curl: -H 'Content-Type: application/json')",
        )
    parameters = parameters.replace(" ", "").replace('"', "").lower()
    if parameters not in ("", "charset=utf-8", "charset=utf8"):
        raise Problem("bad-media-type", "only UTF-8 is taken; leave the charset out")
    if encoding not in ("", "identity", "gzip"):
        raise Problem(
            "bad-media-type", f"Content-Encoding {encoding[:60]!r} is not taken; send gzip or none"
        )
    if (
        kind != _NDJSON_TYPE
        and encoding != "gzip"
        and length.isdigit()
        and (int(length) > limit_bytes)
    ):
        raise Problem(
            "too-large",
            f"the body has {int(length):,} bytes; at most {limit_bytes:,} are taken "
            "(limits.body_mb); send fewer records at once, or stream them as application/x-ndjson",
        )
    return kind, zlib.decompressobj(wbits=31) if encoding == "gzip" else None
