"""One line per stage of a long job, for a log: what was done and how long it took."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager


class Stages:
    """Tells each stage when it ends; `total_s` is how long all took so far."""

    def __init__(self, tell: Callable[[str], None]) -> None:
        self._tell, self._began_s = tell, time.perf_counter()

    @property
    def total_s(self) -> float:
        """Seconds since the job began."""
        return time.perf_counter() - self._began_s

    @contextmanager
    def stage(self, name: str) -> Iterator[list[str]]:
        """Run one stage; what is put into the list is told with it. A failure is told too."""
        said: list[str] = []
        began_s = time.perf_counter()
        try:
            yield said
        except BaseException:
            self._tell(f"{name}: ended early after {time.perf_counter() - began_s:.1f} s")
            raise
        rest = f"{', '.join(said)}, " if said else ""
        self._tell(f"{name}: {rest}{time.perf_counter() - began_s:.1f} s")
