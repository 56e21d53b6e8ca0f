"""The records that learning reads: a spool's chunks with derived channels and folds."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import cached_property, partial

import numpy as np
from numpy.typing import NDArray

from scoring.channels import ChannelTable
from scoring.derived import Carry, derive
from training.blocks import Blocks
from training.hands import HERE, Hands
from training.history.spool import N_CHUNK_ROWS, Spool

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]

# Used where neither the table nor the history says how far records lie apart.
DEFAULT_STEP_S = 60.0
# A sample of this many records settles where bins lie; tables count every record.
MAX_SAMPLE = 40_000
# Values that are in hand at once, 64 MB: from about 120 channels on chunks are shorter, so that
# memory grows with the sample and the tables alone.
MAX_CHUNK_VALUES = 8_000_000
# No source has this many blocks of time.
MAX_BLOCKS = 1_000_000


@dataclass(frozen=True, slots=True)
class Chunk:
    """Some records of one source, in time order.

    times_ns (n,), values (n, n_nodes) with derived channels, fold (n,), clear (n,) true
    where a record may be scored as held out, kept (n,) true where tables may use it.
    """

    source: str
    times_ns: Ints
    values: Floats
    fold: Ints
    clear: NDArray[np.bool_]
    kept: NDArray[np.bool_]


@dataclass(frozen=True)
class Rows:
    """The records of one source or of several, read as often as asked.

    left_out: per source (n, 2) stretches of time in ns that tables must not use.
    hands: who works on these records where that can be shared out.
    """

    spool: Spool
    table: ChannelTable
    sources: tuple[str, ...]
    step_s: float
    left_out: dict[str, Ints] = field(default_factory=dict)
    hands: Hands = HERE

    def of(self, *sources: str) -> Rows:
        """Return the rows of some of the sources."""
        return Rows(self.spool, self.table, sources, self.step_s, self.left_out, self.hands)

    def part(self, *sources: str) -> Rows:
        """Return the rows of some of the sources alone, to be worked on anywhere."""
        left_out = {s: self.left_out[s] for s in sources if s in self.left_out}
        return Rows(self.spool.only(sources), self.table, sources, self.step_s, left_out)

    def parts(self) -> list[Rows]:
        """Return these rows as parts that are counted one by one."""
        sizes = [self.spool.n_records(source) for source in self.sources]
        return [self.part(*(self.sources[k] for k in g)) for g in self.hands.groups(sizes)]

    @property
    def n_records(self) -> int:
        """How many records there are."""
        return sum(self.spool.n_records(source) for source in self.sources)

    def blocks(self, source: str) -> Blocks:
        """Return the blocks of time of one source."""
        first, last = self.spool.first_last_ns(source)
        return Blocks.of(first, last, self.spool.n_records(source), self.step_s)

    def chunks(self) -> Iterator[Chunk]:
        """Yield all records source by source."""
        n_rows = max(1, min(N_CHUNK_ROWS, MAX_CHUNK_VALUES // len(self.table.nodes)))
        for source in self.sources:
            blocks = self.blocks(source)
            carry: Carry | None = None
            for times_ns, values in self.spool.chunks(source, n_rows):
                nodes, carry = derive(self.table, times_ns, values, carry)
                kept = np.ones(len(times_ns), dtype=bool)
                for start, end in self.left_out.get(source, np.zeros((0, 2), np.int64)):
                    kept &= (times_ns < start) | (times_ns > end)
                yield Chunk(
                    source, times_ns, nodes, blocks.fold(times_ns), blocks.clear(times_ns), kept
                )

    def sample(self, folds: tuple[int, ...]) -> tuple[Floats, Ints]:
        """Return (m, n_nodes) records of the given folds, at most about MAX_SAMPLE.

        The second result is the block of time of each, (m,), no two sources' alike.
        Chosen by a hash of their time, so that neither order nor chunking matters.
        """
        values, blocks, fold = self._sampled
        use = np.isin(fold, folds)
        return (values, blocks) if use.all() else (values[use], blocks[use])

    @cached_property
    def _sampled(self) -> tuple[Floats, Ints, Ints]:
        """The sample of all folds: values, blocks and folds. Read once, asked for once a fit."""
        share = MAX_SAMPLE / max(self.n_records, 1)
        parts = [self.part(source) for source in self.sources]
        found, blocks, folds = [], [], []
        for k, one in enumerate(self.hands.each(partial(_sampled_of, share=share), parts)):
            found.append(one[0])
            blocks.append(k * MAX_BLOCKS + one[1])
            folds.append(one[2])
        return np.concatenate(found), np.concatenate(blocks), np.concatenate(folds)


def _sampled_of(rows: Rows, share: float) -> tuple[Floats, Ints, Ints]:
    """Return a share of one source's records: values, blocks and folds."""
    found, blocks, folds = [], [], []
    for chunk in rows.chunks():
        use = chunk.kept
        if share < 1:
            use = use & (hashed(chunk.times_ns) < share)
        found.append(chunk.values[use])
        blocks.append(rows.blocks(chunk.source).number(chunk.times_ns[use]))
        folds.append(chunk.fold[use])
    return np.concatenate(found), np.concatenate(blocks), np.concatenate(folds)


def hashed(times_ns: Ints) -> Floats:
    """Return numbers in 0..1 that depend on nothing but the time (SplitMix64's mixer)."""
    x = times_ns.view(np.uint64) + np.uint64(0x9E3779B97F4A7C15)
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    x ^= x >> np.uint64(31)
    return np.asarray(x.astype(np.float64) / 2.0**64)
