"""Held-out scores: every block of time scored by bins and tables that never saw it.

From them come what is usual for a source, the excess and sustained values from which
levels are set, and what a report shows of them. Scores go to a file as they are made, so
memory does not grow with the history.
"""

from __future__ import annotations

import tempfile
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scoring.bins import MISSING
from scoring.density import removal_of
from scoring.derived import groups
from scoring.excess import ENOUGH_TRUE_ROWS, ExcessScale
from scoring.model import Levels, Member, Usual
from scoring.sustained import sustain
from training.blocks import N_FOLDS, Blocks
from training.coverage import Coverage, CoverageSample
from training.fit import Density
from training.histograms import Histogram, Histograms
from training.rows import Chunk, Rows
from training.worst import Worst, WorstRecord

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Held-out records that a member carries as bins, for what is usual under any mask.
MAX_USUAL_ROWS = 3000
# Records from which medians and 99 % points are taken; from 134 channels on as many as make
# eight million readings, 64 MB.
MAX_MEASURED, MAX_MEASURED_READINGS = 60_000, 8_000_000


@dataclass(frozen=True)
class HeldOut:
    """One source's held-out surprise, in a file, with figures of it.

    density: mean held-out surprise in nats a record. n_scored: records clear of their
    block's guard. by_block: (n_blocks, 2) sum of surprise and number of records.
    histograms: one a node. coverage: of expected intervals. worst: the most surprising.
    """

    path: Path
    n_records: int
    n_scored: int
    density: float
    usual: Usual
    by_block: Floats
    blocks: Blocks
    histograms: list[Histogram]
    coverage: Coverage
    worst: list[WorstRecord]

    def surprise(self, start: int, stop: int) -> Floats:
        """Return held-out surprise of records start to stop, NaN within a guard."""
        with self.path.open("rb") as file:
            file.seek(8 * start)
            return np.fromfile(file, dtype=np.float64, count=stop - start)


def hold_out(
    rows: Rows, source: str, members: list[Member], final: Member, folder: Path
) -> HeldOut:
    """Score each fold of one source by the member that did not see it.

    members: one a fold, each learned from the other folds. final: the member that will be
    used; the kept rows carry its bins. folder: for the file of scores.
    """
    with tempfile.NamedTemporaryFile(dir=folder, delete=False) as file:
        path = Path(file.name)
        seen = _Seen(rows, source, final)
        n_records = 0
        for chunk in rows.of(source).chunks():
            surprise = np.full(len(chunk.times_ns), np.nan)
            own = np.full((len(surprise), len(rows.table.instruments)), np.nan)
            for fold in range(N_FOLDS):
                use = (chunk.fold == fold) & chunk.clear
                if use.any():
                    surprise[use], own[use] = score_values(members[fold], rows, chunk.values[use])
            file.write(surprise.tobytes())
            n_records += len(surprise)
            seen.add(chunk, surprise, own)
    return seen.held_out(path, n_records, members)


def score_values(member: Member, rows: Rows, values: Floats) -> tuple[Floats, Floats]:
    """Return surprise (n,) and each instrument's own (n, n_instruments) of node values."""
    start, nodes = groups(rows.table)
    return removal_of(member, member.bin_table.rows(values), start, nodes)


class _Seen:
    """What is kept of one source's held-out records as they stream by."""

    def __init__(self, rows: Rows, source: str, final: Member) -> None:
        n_records = rows.of(source).n_records
        self._final = final
        self._blocks = rows.blocks(source)
        self._by_block = np.zeros((self._blocks.n_blocks, 2))
        self._sampled = _Sampled(n_records, len(rows.table.instruments))
        self._histograms = Histograms(final, n_records)
        self._coverage = CoverageSample(rows.table, n_records)
        self._worst = Worst(rows.table, self._blocks.n_blocks)

    def add(self, chunk: Chunk, surprise: Floats, own: Floats) -> None:
        """Take in a chunk. surprise: (n,) NaN = within a guard; own: (n, n_instruments)."""
        there = ~np.isnan(surprise)
        times_ns, fold, values = chunk.times_ns[there], chunk.fold[there], chunk.values[there]
        surprise, own = surprise[there], own[there]
        number, n_blocks = self._blocks.number(times_ns), self._blocks.n_blocks
        self._by_block[:, 0] += np.bincount(number, weights=surprise, minlength=n_blocks)
        self._by_block[:, 1] += np.bincount(number, minlength=n_blocks)
        # What is usual is asked of the records that tables may use.
        kept = chunk.kept[there]
        self._sampled.add(surprise[kept], own[kept], self._final.bin_table.rows(values[kept]))
        self._histograms.add(values)
        self._coverage.add(times_ns, fold, values)
        self._worst.add(number, times_ns, fold, values, (surprise, own))

    def held_out(self, path: Path, n_records: int, members: list[Member]) -> HeldOut:
        """Return what was found; path, n_records: of the file of scores."""
        total, n_scored = self._by_block.sum(axis=0)
        usual = self._sampled.usual()
        return HeldOut(
            path,
            n_records,
            int(n_scored),
            float(total / max(n_scored, 1.0)),
            usual,
            self._by_block,
            self._blocks,
            self._histograms.found(),
            self._coverage.coverage(members),
            self._worst.records(members, self._final, usual),
        )


class _Sampled:
    """A sample of held-out records: surprise, each channel's own, bins under the final member."""

    def __init__(self, n_records: int, n_instruments: int) -> None:
        most = min(MAX_MEASURED, MAX_MEASURED_READINGS // n_instruments)
        self._every = max(1, n_records // max(most, 1))
        self._seen = 0
        self._parts: list[tuple[Floats, Floats, NDArray[np.uint8]]] = []

    def add(self, surprise: Floats, own: Floats, bins: NDArray[np.uint8]) -> None:
        """Take every so many-th record."""
        at = np.arange(-self._seen % self._every, len(surprise), self._every)
        self._seen += len(surprise)
        self._parts.append((surprise[at], own[at], bins[at]))

    def usual(self) -> Usual:
        """Return what is usual under the final member."""
        return usual_of(*(np.concatenate(p) for p in zip(*self._parts, strict=True)))


def usual_of(surprise: Floats, own: Floats, bins: NDArray[np.uint8]) -> Usual:
    """Return what is usual from scored records; sustained is set later, with the levels.

    surprise: (n,), own: (n, n_instruments) nats, bins: (n, n_nodes).
    """
    n_instruments = own.shape[1]
    middle, spread = np.zeros(n_instruments), np.ones(n_instruments)
    if not len(surprise):
        return Usual(0.0, 1.0, 0.0, middle, spread, bins)
    keep = np.linspace(0, len(bins) - 1, min(MAX_USUAL_ROWS, len(bins))).astype(int)
    whole = ~(bins == MISSING).any(axis=1)
    full = surprise[whole] if whole.sum() >= ENOUGH_TRUE_ROWS else surprise
    for i in range(n_instruments):
        there = own[~np.isnan(own[:, i]), i]
        if len(there):
            middle[i] = np.median(there)
            spread[i] = max(float(np.quantile(there, 0.99)) - middle[i], 1e-3)
    return Usual(
        float(np.median(full)), float(np.quantile(full, 0.99)), 0.0, middle, spread, bins[keep]
    )


@dataclass(frozen=True, slots=True)
class Followed:
    """Some consecutive records of one source: times, excess and sustained, (n,) each."""

    times_ns: Ints
    excess: Floats
    sustained: Floats


def follow(rows: Rows, member: Member, held_out: HeldOut, levels: Levels) -> Iterator[Followed]:
    """Yield held-out excess and sustained in time order, in chunks.

    excess is NaN within guards and where too few readings are there to judge.
    """
    scale = ExcessScale(member)
    n_instruments = len(rows.table.instruments)
    last_ns, value, start = -1, member.usual.sustained, 0
    for chunk in rows.of(member.source).chunks():
        surprise = held_out.surprise(start, start + len(chunk.times_ns))
        start += len(chunk.times_ns)
        bins = member.bin_table.rows(chunk.values)
        n_usable = (~np.isnan(chunk.values[:, :n_instruments])).sum(axis=1)
        excess = np.where(n_usable >= levels.least_readings, scale.excess(bins, surprise), np.nan)
        sustained, _, last_ns, value = sustain(
            chunk.times_ns,
            excess,
            last_ns,
            value,
            member.usual.sustained,
            levels.tau_s,
            levels.step_s,
            levels.cap,
        )
        yield Followed(chunk.times_ns, excess, sustained)


def member_of(source: str, density: Density, usual: Usual | None = None) -> Member:
    """Return a member with one part from a fitted density."""
    from_nothing = Usual(
        0.0, 1.0, 0.0, np.zeros(0), np.zeros(0), np.zeros((0, len(density.fine)), np.uint8)
    )
    return Member(source, density.bins, density.parts, usual or from_nothing, density.regime)
