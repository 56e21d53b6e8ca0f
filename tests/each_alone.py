"""Hands that share work out in another way than this process alone does."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

from training.hands import Here, Item, Result


@dataclass(frozen=True)
class EachAlone(Here):
    """Hands that take every source by itself, the last one first."""

    def each(self, work: Callable[[Item], Result], items: Sequence[Item]) -> Iterator[Result]:
        """Yield work(item) of all items, in their order though done in another."""
        found = {k: work(items[k]) for k in reversed(range(len(items)))}
        yield from (found[k] for k in range(len(items)))

    def groups(self, sizes: Sequence[int]) -> list[list[int]]:
        """Return every source by itself."""
        return [[k] for k in reversed(range(len(sizes)))]
