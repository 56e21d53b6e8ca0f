"""Which of two models is less surprised by days that neither saw, and how sure that is.

Two models differ in bins, channels and derived channels, so their surprises are no common
measure. Compared is density per unit, on the instruments and readings that both know: a
reading in an outermost bin of either, or a word that one never saw, is hidden from both,
and so is all that is derived. The doubt comes from drawing blocks of time anew (a block
bootstrap: Kuensch 1989, Annals of Statistics 17, 1217-1241), all sources of a block
together, because neighbours share their weather.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows, Bins
from scoring.channels import Channel
from scoring.density import surprise_of
from scoring.model import Member, Model

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
# One source's records: name, times (n,) ns, values (n, n_instruments of the new table).
Records = tuple[str, Ints, Floats]

N_DRAWN: Final = 2000
_TAIL: Final = 0.025
# A bin counts as no narrower than this share of its channel's usual width, nor than the
# channel's resolution: point values have no density per unit.
_LEAST_WIDTH: Final = 1e-3


@dataclass(frozen=True, slots=True)
class Compared:
    """The new model's surprise less the other's on the same readings, nats a reading.

    low, high: 95 % limits, equal to nats where only one block was there. new: the new
    model's own mean, nats a reading of density per unit. n_blocks: of time. n_readings:
    compared; n_hidden: that only one of the two knows. by_source: nats a reading of each.
    """

    nats: float
    low: float
    high: float
    new: float
    n_blocks: int
    n_readings: int
    n_hidden: int
    by_source: dict[str, float]


@dataclass(frozen=True, slots=True)
class Sums:
    """What two models made of one source's records.

    blocks: (k,) numbers of its blocks of time. sums: (k, 3) of each the new model's nats less
    the other's, the new model's own, readings compared. n_hidden: readings that only one knows.
    """

    source: str
    blocks: Ints
    sums: Floats
    n_hidden: int


def compare(new: Model, old: Model, records: Iterable[Records], block_ns: int) -> Compared | None:
    """Return how two models compare; None where they share no reading."""
    return compared(sums_of(new, old, one, block_ns) for one in records)


def sums_of(new: Model, old: Model, records: Records, block_ns: int) -> Sums:
    """Return what two models make of one source's records."""
    source, times_ns, values = records
    difference, own, n_known, n_hidden = _differences(
        new.member(source), old.member(source), new, old, shared_instruments(new, old), values
    )
    blocks, at = np.unique(times_ns // block_ns, return_inverse=True)
    table = np.array(
        [
            [difference[rows].sum(), own[rows].sum(), n_known[rows].sum()]
            for rows in (at == k for k in range(len(blocks)))
        ]
    )
    return Sums(source, blocks, table.reshape(-1, 3), n_hidden)


def compared(found: Iterable[Sums]) -> Compared | None:
    """Return how two models compare over sources, in the order given; None without a reading.

    The same sources in the same order give the same numbers to the last digit.
    """
    sums: dict[int, Floats] = {}
    by_source: dict[str, float] = {}
    n_hidden = 0
    for one in found:
        n_hidden += one.n_hidden
        difference, _, n_known = one.sums.sum(axis=0)
        if not n_known:
            continue
        by_source[one.source] = float(difference / n_known)
        for block, part in zip(one.blocks.tolist(), one.sums, strict=True):
            sums[block] = sums.get(block, np.zeros(3)) + part
    if not sums:
        return None
    table = np.stack([sums[block] for block in sorted(sums)])
    total = table.sum(axis=0)
    low, high = _limits(table)
    return Compared(
        float(total[0] / total[2]), low, high, float(total[1] / total[2]), len(table),
        int(total[2]), n_hidden, by_source,
    )  # fmt: skip


def shared_instruments(new: Model, old: Model) -> list[tuple[int, int]]:
    """Return the numbers, in both tables, of the instruments that are in both as one kind."""
    there = {channel.name: k for k, channel in enumerate(old.table.instruments)}
    return [
        (k, there[channel.name])
        for k, channel in enumerate(new.table.instruments)
        if channel.name in there
        and channel.is_state == old.table.instruments[there[channel.name]].is_state
    ]


def as_read_by(old: Model, new: Model, values: Floats) -> Floats:
    """Return readings of the new table's instruments in the order of the old one's.

    (n, n_old_instruments), NaN for what the new table lacks; words by their name.
    """
    out = np.full((len(values), len(old.table.instruments)), np.nan)
    for mine, theirs in shared_instruments(new, old):
        out[:, theirs] = _reworded(
            values[:, mine], new.table.instruments[mine], old.table.instruments[theirs]
        )
    return out


def _reworded(column: Floats, mine: Channel, theirs: Channel) -> Floats:
    if not mine.is_state:
        return column
    never = len(theirs.words)
    codes = [theirs.words.index(word) if word in theirs.words else never for word in mine.words]
    lookup = np.array([*codes, never], dtype=np.float64)
    out, there = np.full(len(column), np.nan), ~np.isnan(column)
    out[there] = lookup[np.clip(column[there].astype(np.int64), 0, len(mine.words))]
    return out


def _differences(
    mine: Member, theirs: Member, new: Model, old: Model, pairs: list[tuple[int, int]],
    values: Floats,
) -> tuple[Floats, Floats, Ints, int]:  # fmt: skip
    """Return by record: new less old and the new alone, nats summed over known readings, and
    their number; then how many readings were hidden in all."""
    my_rows = _rows(mine, values, [a for a, _ in pairs])
    their_values = as_read_by(old, new, values)
    their_rows = _rows(theirs, their_values, [b for _, b in pairs])
    my_width, their_width = np.zeros(len(values)), np.zeros(len(values))
    n_known, n_hidden = np.zeros(len(values), dtype=np.int64), 0
    for a, b in pairs:
        there = my_rows[:, a] != MISSING
        known = there & _inside(mine.bins[a], my_rows[:, a])
        known &= _inside(theirs.bins[b], their_rows[:, b])
        n_hidden += int((there & ~known).sum())
        my_rows[~known, a] = MISSING
        their_rows[~known, b] = MISSING
        n_known += known
        least = _least_width(new.table.instruments[a], theirs.bins[b])
        my_width[known] += _log_widths(mine.bins[a], least)[my_rows[known, a]]
        their_width[known] += _log_widths(theirs.bins[b], least)[their_rows[known, b]]
    own = surprise_of(mine, my_rows) + my_width
    other = surprise_of(theirs, their_rows) + their_width
    return own - other, own, n_known, n_hidden


def _rows(member: Member, values: Floats, use: list[int]) -> BinRows:
    """Return bins of some instruments' readings, everything else missing."""
    nodes = np.full((len(values), len(member.bins)), np.nan)
    nodes[:, use] = values[:, use]
    return member.bin_table.rows(nodes)


def _inside(bins: Bins, numbers: NDArray[np.uint8]) -> NDArray[np.bool_]:
    """Return where a bin has both ends, or a word was seen in learning."""
    if bins.n_words:
        return np.asarray(numbers < bins.n_words)
    return np.asarray((numbers > 0) & (numbers < len(bins.borders)))


def _least_width(channel: Channel, bins: Bins) -> float:
    if bins.n_words or len(bins.borders) < 2:
        return 1.0
    usual = float(np.median(np.diff(bins.borders))) * len(bins.borders)
    return max(channel.resolution or 0.0, _LEAST_WIDTH * usual)


def _log_widths(bins: Bins, least: float) -> Floats:
    """Return ln of each bin's width, (n_bins,), 0 where it has none."""
    out = np.zeros(bins.n_bins)
    if not bins.n_words and len(bins.borders) > 1:
        out[1 : len(bins.borders)] = np.log(np.maximum(np.diff(bins.borders), least))
    return out


def _limits(table: Floats) -> tuple[float, float]:
    """Return 95 % limits of the mean difference from blocks drawn with replacement."""
    rng = np.random.default_rng(1)
    n = len(table)
    means = np.empty(N_DRAWN)
    for k in range(N_DRAWN):
        drawn = table[rng.integers(0, n, n)].sum(axis=0)
        means[k] = drawn[0] / drawn[2]
    low, high = np.quantile(means, [_TAIL, 1.0 - _TAIL])
    return float(low), float(high)
