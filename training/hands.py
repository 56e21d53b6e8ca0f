"""Who does the work on a source's records: this process, or whoever is given it.

Work is a function of one item, and items are few sources' records. What comes back comes in
the order of the items, and sums are of whole numbers, so that nothing learned depends on who
did the work, on how many they were, or on who was first.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import reduce
from pathlib import Path
from typing import Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray

Item = TypeVar("Item")
Result = TypeVar("Result")

# Counts and numbers of records, one of each for everything that was to be counted.
Counted = list[tuple[NDArray[np.int64], int]]


class Hands(Protocol):
    """Does work on items; see `Here`, and `training.cluster` for several machines."""

    def each(self, work: Callable[[Item], Result], items: Sequence[Item]) -> Iterator[Result]:
        """Yield work(item) of all items, in their order."""

    def total(self, work: Callable[[Item], Counted], items: Sequence[Item]) -> Counted:
        """Return the sum of work(item) over all items, of which there is at least one."""

    def groups(self, sizes: Sequence[int]) -> list[list[int]]:
        """Return which neighbours to take together, as places; sizes: records, as if counted."""

    def must_see(self, folder: Path) -> None:
        """Raise NoCluster unless whoever does the work can write to a folder."""


@dataclass(frozen=True)
class Here:
    """This process, one item after the other."""

    def each(self, work: Callable[[Item], Result], items: Sequence[Item]) -> Iterator[Result]:
        """Yield work(item) of all items, each when it is asked for."""
        return map(work, items)

    def total(self, work: Callable[[Item], Counted], items: Sequence[Item]) -> Counted:
        """Return the sum of work(item) over all items."""
        return reduce(lambda a, b: added([a, b]), map(work, items))

    def groups(self, sizes: Sequence[int]) -> list[list[int]]:
        """Count everything together: counts are held once."""
        return [list(range(len(sizes)))]

    def must_see(self, folder: Path) -> None:
        """Do nothing: this process made the folder."""


HERE = Here()


def added(parts: Sequence[Counted]) -> Counted:
    """Return the sum of several counts of the same things; whole numbers, so in any order."""
    return [
        (np.sum([counts for counts, _ in same], axis=0), sum(n for _, n in same))
        for same in zip(*parts, strict=True)
    ]
