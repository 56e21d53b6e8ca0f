"""NDJSON both ways: lines in, an answer a line out, in constant memory.

A client may send everything before it reads anything. Answers that it does not read yet
wait in memory, then in a file of their own, so that reading its lines never stands still
on writing answers; neither side can wait for the other for ever. Where that file finds no
room, what is stored is still answered, no further line is taken, and a last line says so.
"""

from __future__ import annotations

import asyncio
import contextlib
import os
import tempfile
from collections import deque
from collections.abc import AsyncGenerator
from typing import IO, Any

import orjson
from starlette.types import Receive, Scope, Send

from service.answers import batch_answers
from service.bodies import BodyReader, ClientGone
from service.logs import log_event
from service.pipeline import Job, Outcome
from service.problems import Problem
from service.running import Service

# Lines that go through the writer together: as large as a batch gains from.
_N_LINES = 1000
# A slow sender should not wait for a thousand lines before it reads its first answer.
_PIECE_BYTES = 1_000_000
_PAUSE_S = 0.05
_SPOOL_BYTES = 4_000_000


async def answer_lines(
    service: Service, scope: Scope, receive: Receive, send: Send, request: str, channels: bool
) -> None:
    """Answer one NDJSON request."""
    reader = BodyReader(service, scope, receive, service.settings.limits.stream_mb)
    spool = AnswerSpool()
    sender = asyncio.create_task(_send_all(spool, send))
    try:
        async with contextlib.aclosing(_pieces(service, reader)) as pieces:
            async for position, lines in pieces:
                answers = await _answer_piece(service, position, lines, request, channels)
                try:
                    spool.put(answers)
                except OSError as error:
                    log_event("answers_full", request=request, detail=str(error))
                    raise _no_room(position + len(lines)) from None
    except ClientGone:
        sender.cancel()
    except Problem as problem:
        # Status 200 may be out already; the refusal stands where the next answer would.
        if not spool.n_put:
            sender.cancel()
            raise
        scope["state"]["problem"] = problem.kind
        spool.put_last(orjson.dumps({"problem": problem.as_dict()}) + b"\n")
        await _drop_rest(receive, sender)
    except BaseException:
        sender.cancel()
        raise
    finally:
        spool.end()
        await asyncio.gather(sender, return_exceptions=True)
        spool.close()


def _no_room(index: int) -> Problem:
    return Problem(
        "answers-full",
        f"there is no room for more answers that are not read yet; the {index} lines before this "
        "place are answered, none from here on was stored",
        index=index,
    )


async def _drop_rest(receive: Receive, sender: asyncio.Task[None]) -> None:
    """Read on without use until the answer is out: some clients read only when all is sent."""

    async def drop() -> bool:
        while True:
            message = await receive()
            if message["type"] == "http.disconnect":
                return True
            if not message.get("more_body"):
                return False

    rest = asyncio.create_task(drop())
    await asyncio.wait((rest, sender), return_when=asyncio.FIRST_COMPLETED)
    if not rest.done():
        rest.cancel()
    elif rest.result():
        sender.cancel()


async def _pieces(
    service: Service, reader: BodyReader
) -> AsyncGenerator[tuple[int, list[bytes | Problem]], None]:
    """Yield the position of the first line, and lines; blank lines are no items."""
    limit = int(service.settings.limits.line_kb * 1000)
    splitter = LineSplitter(limit)
    lines: list[bytes | Problem] = []
    position = n_bytes = 0
    source = reader.stream().__aiter__()
    coming: asyncio.Future[bytes] | None = None
    try:
        while True:
            if coming is None:
                coming = asyncio.ensure_future(anext(source))
            # What has come is answered when the sender pauses, or when it is enough.
            done, _ = await asyncio.wait((coming,), timeout=_PAUSE_S if lines else None)
            if not done:
                yield position, lines
                position, lines, n_bytes = position + len(lines), [], 0
                continue
            try:
                piece = coming.result()
            except StopAsyncIteration:
                break
            except Problem as problem:
                # What came whole before it is answered, and the sender told from where to go on.
                if lines:
                    yield position, lines
                index = position + len(lines)
                if not index:
                    raise
                raise Problem(problem.kind, problem.detail, index=index) from None
            finally:
                coming = None
            n_bytes += len(piece)
            for line in splitter.feed(piece):
                lines.append(line)
                if len(lines) >= _N_LINES:
                    yield position, lines
                    position, lines, n_bytes = position + len(lines), [], 0
            if n_bytes >= _PIECE_BYTES and lines:
                yield position, lines
                position, lines, n_bytes = position + len(lines), [], 0
        lines += splitter.rest()
        if lines:
            yield position, lines
    finally:
        if coming is not None:
            coming.cancel()


async def _answer_piece(
    service: Service, position: int, lines: list[bytes | Problem], request: str, channels: bool
) -> bytes:
    engine, parser = service.models.in_use
    broken = {i: line for i, line in enumerate(lines) if isinstance(line, Problem)}
    batch = parser.lines([b"null" if isinstance(line, Problem) else line for line in lines])
    batch.problems.update(broken)
    if batch.problems:
        service.metrics.refused(len(batch.problems))
    if not batch.sources:
        return _lines([batch.problems[i].as_item(position + i) for i in range(batch.n_items)])
    try:
        outcome = await _submit_patiently(service, Job(batch, engine, request, channels))
    except Problem as problem:
        # Nothing of this piece is stored; every line of it is told so in its place.
        refused = {**dict.fromkeys(range(batch.n_items), problem), **batch.problems}
        return _lines([refused[i].as_item(position + i) for i in range(batch.n_items)])
    answers = batch_answers(batch, outcome)
    if position and (batch.problems or not outcome.sheet.is_plain):
        _shift(answers, position)
    return _lines(answers)


async def _submit_patiently(service: Service, job: Job) -> Outcome:
    """Wait for room in the queue: a stream is read no faster than it is stored."""
    while True:
        try:
            waiting = service.writer.submit(job)
        except Problem as problem:
            if problem.kind != "overload":
                raise
            await asyncio.sleep(_PAUSE_S)
            continue
        return await waiting


def _shift(answers: list[dict[str, Any]], position: int) -> None:
    """Count refused lines from the start of the stream."""
    for answer in answers:
        if "problem" in answer:
            answer["index"] += position
            answer["problem"]["index"] += position


def _lines(answers: list[dict[str, Any]]) -> bytes:
    return b"".join([orjson.dumps(a, option=orjson.OPT_APPEND_NEWLINE) for a in answers])


class LineSplitter:
    """Cuts pieces into lines; a line over the limit becomes a problem and is not kept."""

    def __init__(self, limit_bytes: int) -> None:
        self.limit_bytes = limit_bytes
        self._start = b""
        self._too_long = False

    def feed(self, piece: bytes) -> list[bytes | Problem]:
        """Return the lines that end in this piece, without blank ones."""
        *whole, rest = piece.split(b"\n")
        found: list[bytes | Problem] = []
        for line in whole:
            text = self._start + line if self._start else line
            self._start = b""
            if self._too_long or len(text) > self.limit_bytes:
                found.append(self._refusal())
            elif text.strip():
                found.append(text)
            self._too_long = False
        if not self._too_long:
            self._start += rest
            if len(self._start) > self.limit_bytes:
                self._start, self._too_long = b"", True
        return found

    def rest(self) -> list[bytes | Problem]:
        """Return the last line where no line feed ends it."""
        if self._too_long:
            return [self._refusal()]
        return [self._start] if self._start.strip() else []

    def _refusal(self) -> Problem:
        return Problem(
            "too-large", f"the line is longer than {self.limit_bytes} bytes (limits.line_kb)"
        )


class AnswerSpool:
    """Answers between the reader and the sender: first in memory, then in a file."""

    def __init__(self) -> None:
        self._pieces: deque[bytes] = deque()
        self._n_bytes = 0
        # Without a buffer: one that could not be written would fail once more at every later call.
        self._file: IO[bytes] | None = None
        self._read_at = self._written = 0
        # What comes after the file, where it has no room.
        self._last: deque[bytes] = deque()
        self._news = asyncio.Event()
        self._ended = False
        self.n_put = 0

    def put(self, piece: bytes) -> None:
        """Add answers; raises OSError where the file has no room.

        They will be sent all the same, from memory; then only `put_last` may follow.
        """
        self.n_put += 1
        self._news.set()
        behind = self._written > self._read_at
        if not behind and (not self._pieces or self._n_bytes + len(piece) <= _SPOOL_BYTES):
            self._pieces.append(piece)
            self._n_bytes += len(piece)
            return
        try:
            if self._file is None:
                self._file = tempfile.TemporaryFile(buffering=0)  # noqa: SIM115 - see close()
            _write_whole(self._file, piece, self._written)
        except OSError:
            self._last.append(piece)
            raise
        self._written += len(piece)

    def put_last(self, piece: bytes) -> None:
        """Add what ends the answer; it waits in memory, and nothing may follow.

        The sender ends by itself then: where the body has come whole nothing else wakes anyone.
        """
        self._last.append(piece)
        self.end()

    def end(self) -> None:
        """Say that nothing more comes."""
        self._ended = True
        self._news.set()

    async def take(self) -> bytes | None:
        """Return the next answers, or None after the last."""
        while True:
            if self._pieces:
                piece = self._pieces.popleft()
                self._n_bytes -= len(piece)
                return piece
            if self._file is not None and self._read_at < self._written:
                n_bytes = min(_PIECE_BYTES, self._written - self._read_at)
                piece = os.pread(self._file.fileno(), n_bytes, self._read_at)
                self._read_at += len(piece)
                if self._read_at == self._written:
                    self._file.truncate(0)
                    self._read_at = self._written = 0
                return piece
            if self._last:
                return self._last.popleft()
            if self._ended:
                return None
            self._news.clear()
            await self._news.wait()

    def close(self) -> None:
        """Drop the file; may be called twice."""
        if self._file is not None:
            self._file.close()


def _write_whole(file: IO[bytes], piece: bytes, at: int) -> None:
    """Write there; the kernel may take less at once, and says only at the next that all is full."""
    rest = memoryview(piece)
    while rest:
        n_bytes = os.pwrite(file.fileno(), rest, at)
        rest, at = rest[n_bytes:], at + n_bytes


async def _send_all(spool: AnswerSpool, send: Send) -> None:
    piece = await spool.take()
    await send(
        {
            "type": "http.response.start",
            "status": 200,
            "headers": [(b"content-type", b"application/x-ndjson"), (b"x-accel-buffering", b"no")],
        }
    )
    while piece is not None:
        await send({"type": "http.response.body", "body": piece, "more_body": True})
        piece = await spool.take()
    await send({"type": "http.response.body", "body": b""})
