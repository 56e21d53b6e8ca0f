"""A progress bar on a terminal, nothing in a pipe."""

from __future__ import annotations

import sys
from types import TracebackType
from typing import Self

from rich.console import Console
from rich.progress import BarColumn, TaskProgressColumn, TextColumn, TimeRemainingColumn
from rich.progress import Progress as Bar


class Progress:
    """Shows how far a piece of work is; a context manager.

    what: a few words, for example "reading history". total: in the unit that `advance`
    counts, None while it is not known. The bar is on stderr and goes away at the end.
    """

    def __init__(self, what: str, total: int | None = None) -> None:
        console = Console(stderr=True)
        self._bar = Bar(
            TextColumn("{task.description}"),
            BarColumn(),
            TaskProgressColumn(),
            TimeRemainingColumn(),
            console=console,
            transient=True,
            disable=not sys.stderr.isatty(),
        )
        self._task = self._bar.add_task(what, total=total)

    def advance(self, n: int) -> None:
        """Note that n more units are done."""
        self._bar.advance(self._task, n)

    def __enter__(self) -> Self:
        self._bar.start()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        at: TracebackType | None,
    ) -> None:
        self._bar.stop()
