"""The most surprising held-out records of one source: the worst of each block of time.

One a block, because a stretch of trouble would otherwise fill the list with near copies.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.channels import ChannelTable
from scoring.excess import ExcessScale
from scoring.model import Levels, Member, Model, Usual
from scoring.scorer import Expected, Scorer

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Records kept of one source.
N_WORST: Final = 12
# Nothing is judged here; scoring only wants some.
_NO_LEVELS: Final = Levels(np.inf, np.inf, np.inf, 1.0, 1.0, 0)


@dataclass(frozen=True)
class WorstRecord:
    """One held-out record and whom it suspects.

    surprise, excess, suspect_surprise: nats. suspect: number of the instrument, -1 = none.
    values: (n_nodes,) as read, NaN = missing; a state holds the number of its word.
    expected: what the suspect should have read.
    """

    time_ns: int
    surprise: float
    excess: float
    suspect: int
    suspect_surprise: float
    values: Floats
    expected: Expected


class Worst:
    """Keeps the most surprising record of each of n_blocks blocks."""

    def __init__(self, table: ChannelTable, n_blocks: int) -> None:
        self._table = table
        self._surprise = np.full(n_blocks, -np.inf)
        self._times_ns = np.zeros(n_blocks, dtype=np.int64)
        self._fold = np.zeros(n_blocks, dtype=np.int64)
        self._values = np.full((n_blocks, len(table.nodes)), np.nan)
        self._own = np.full((n_blocks, len(table.instruments)), np.nan)

    def add(
        self, block: Ints, times_ns: Ints, fold: Ints, values: Floats, scores: tuple[Floats, Floats]
    ) -> None:
        """Take in scored records in the order of time.

        block, times_ns, fold: (n,). values: (n, n_nodes). scores: surprise (n,) and each
        instrument's own (n, n_instruments), nats.
        """
        surprise, own = scores
        for number in np.unique(block).tolist():
            of = np.flatnonzero(block == number)
            best = of[int(np.argmax(surprise[of]))]
            if surprise[best] > self._surprise[number]:
                self._surprise[number] = surprise[best]
                self._times_ns[number], self._fold[number] = times_ns[best], fold[best]
                self._values[number], self._own[number] = values[best], own[best]

    def records(self, members: list[Member], final: Member, usual: Usual) -> list[WorstRecord]:
        """Return the most surprising records, worst first.

        members: one a fold, which did not see it. final, usual: of the member that will be
        used; excess is against it, as for levels.
        """
        scale = ExcessScale(replace(final, usual=usual))
        order = np.argsort(-self._surprise, kind="stable")[:N_WORST]
        scorers: dict[int, Scorer] = {}
        found = []
        for number in order[np.isfinite(self._surprise[order])].tolist():
            fold = int(self._fold[number])
            if fold not in scorers:
                scorers[fold] = Scorer(Model(self._table, {}, members[fold], _NO_LEVELS))
            found.append(self._record(number, scorers[fold], final, scale, usual))
        return found

    def _record(
        self, number: int, scorer: Scorer, final: Member, scale: ExcessScale, usual: Usual
    ) -> WorstRecord:
        values, own = self._values[number], self._own[number]
        surprise = self._surprise[number : number + 1]
        excess = scale.excess(final.bin_table.rows(values[None, :]), surprise)
        suspect = -1 if np.isnan(own).all() else int(np.nanargmax(own - usual.channel_median))
        expected = Expected(np.nan, np.nan, np.nan)
        if suspect >= 0:
            row = scorer.model.fleet.bin_table.rows(values[None, :])[0]
            expected = scorer.expected("", row, suspect)
        return WorstRecord(
            int(self._times_ns[number]),
            float(surprise[0]),
            float(excess[0]),
            suspect,
            float(own[suspect]) if suspect >= 0 else np.nan,
            values.copy(),
            expected,
        )
