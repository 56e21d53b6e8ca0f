"""Hands that share work out in another way than this process alone does."""

from __future__ import annotations

import pickle
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

from training.hands import Counted, Here, Item, Result


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


@dataclass(frozen=True)
class ByPost(EachAlone):
    """Hands that get everything as bytes, as another machine would, and note how many."""

    n_bytes: list[int]

    def each(self, work: Callable[[Item], Result], items: Sequence[Item]) -> Iterator[Result]:
        """Yield what comes back of all items."""
        yield from super().each(self._posted(work), items)

    def total(self, work: Callable[[Item], Counted], items: Sequence[Item]) -> Counted:
        """Return the sum of what comes back."""
        return super().total(self._posted(work), items)

    def _posted(self, work: Callable[[Item], Result]) -> Callable[[Item], Result]:
        def posted(item: Item) -> Result:
            sent = pickle.dumps((work, item))
            self.n_bytes.append(len(sent))
            there, what = pickle.loads(sent)
            result: Result = pickle.loads(pickle.dumps(there(what)))
            return result

        return posted
