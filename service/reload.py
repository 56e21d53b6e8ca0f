"""A newly published model is picked up while the service runs.

The directory is read aside, in a thread; only a whole model that scores takes the place
of the old one. A broken one is reported once, and the old one goes on.
"""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from pathlib import Path

from scoring.errors import OddbranchError
from service.engine import Engine
from service.logs import log_event
from service.metrics import Metrics
from service.parse import Parser
from service.settings import LimitSettings

_Mark = tuple[int, int, int, str]


class ModelWatch:
    """Holds the model in use and looks for another at the same path."""

    def __init__(
        self, path: Path, load: Callable[[Path], Engine], metrics: Metrics, limits: LimitSettings
    ) -> None:
        self.path, self.load, self.metrics, self.limits = path, load, metrics, limits
        self._in_use: tuple[Engine, Parser] | None = None
        self._mark: _Mark | None = None
        self._published_s = 0.0
        # Called once another model is in use.
        self.when_taken: Callable[[], None] = lambda: None
        # Why the model that lies there now is not in use, for the readiness answer.
        self.refusal: str | None = None

    @property
    def engine(self) -> Engine:
        """The model in use."""
        return self.in_use[0]

    @property
    def in_use(self) -> tuple[Engine, Parser]:
        """The model in use and the parser of its layout, which change together."""
        assert self._in_use is not None, "open the service first"
        return self._in_use

    @property
    def published_s(self) -> float:
        """When the model in use was published, seconds since 1970."""
        return self._published_s

    def load_first(self) -> None:
        """Load the model or raise OddbranchError: without one there is nothing to serve."""
        self._mark = self._marked()
        self._in_use = self._ready(self.load(self.path.resolve()))

    async def look(self) -> None:
        """Take a model that was published since the last look."""
        mark = await asyncio.to_thread(self._marked)
        if mark is None or mark == self._mark:
            return
        try:
            engine = await asyncio.to_thread(self.load, self.path.resolve())
        except (OddbranchError, OSError, ValueError, KeyError) as error:
            self._refuse(mark, str(error))
            return
        # Published over once more while it was read: the next look takes that one.
        if mark != await asyncio.to_thread(self._marked):
            return
        self._mark, self.refusal = mark, None
        if engine.name != self.engine.name:
            log_event("model_changed", model=engine.name, before=self.engine.name)
            self.metrics.reloads["taken"] += 1
            self._in_use = self._ready(engine)
            self.when_taken()

    def _ready(self, engine: Engine) -> tuple[Engine, Parser]:
        if self._mark is not None:
            self._published_s = self._mark[1] / 1e9
        limits = self.limits
        parser = Parser(engine.layout, n_batch_max=limits.n_batch, n_readings_max=limits.n_readings)
        return engine, parser

    def _refuse(self, mark: _Mark, why: str) -> None:
        self._mark, self.refusal = mark, why
        self.metrics.reloads["refused"] += 1
        log_event("model_refused", path=str(self.path), detail=why, kept=self.engine.name)

    def _marked(self) -> _Mark | None:
        """Return what changes when a directory is published by rename or by a link."""
        try:
            real = self.path.resolve()
            stat = (real / "model.json").stat()
        except OSError:
            return None
        return stat.st_ino, stat.st_mtime_ns, stat.st_size, str(real)
