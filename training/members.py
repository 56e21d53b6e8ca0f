"""A member for each source, one for the fleet, and the held-out scores of each."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from functools import partial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scoring.channels import ChannelTable
from scoring.model import Member, Usual
from training.blocks import N_FOLDS
from training.crossfit import HeldOut, hold_out, member_of, score_values, usual_of
from training.fit import Density, Shared, agreed, fit, fit_regimes
from training.rows import Rows
from training.trouble import Stretch, as_left_out, find_trouble

Ints = NDArray[np.int64]

# A source with fewer records is scored by the fleet's member.
LEAST_OWN_RECORDS = 200
# From this many records on, held-out tables keep the structure and choices that all
# records chose: what that leaks is far below what it saves.
SETTLED_RECORDS = 20_000
# Groups of sources that take turns as sources never seen.
SOURCE_GROUPS = 3
# More state channels than this are not combined without the site's word.
MAX_REGIME_STATES = 4


@dataclass(frozen=True)
class Learned:
    """One member with how it was learned, and the stretches its tables did not use.

    left_out: found by their surprise. in_alert: (n, 2) first and last times in ns, known
    beforehand to have been in alert.
    """

    member: Member
    density: Density
    held_out: HeldOut
    left_out: list[Stretch] = field(default_factory=list)
    in_alert: Ints = field(default_factory=lambda: np.zeros((0, 2), dtype=np.int64))

    @property
    def unused(self) -> Ints:
        """All stretches that the tables did not use, (n, 2) first and last times in ns."""
        return np.concatenate([self.in_alert, as_left_out(self.left_out)])


def with_enough(rows: Rows) -> list[str]:
    """Return the sources that have records enough for a member of their own.

    Where the rows leave stretches out, what is left must be enough without any one fold.
    """
    many = [s for s in rows.sources if rows.spool.n_records(s) >= LEAST_OWN_RECORDS]
    asked = [s for s in many if len(rows.left_out.get(s, ()))]
    found = rows.hands.each(_is_enough_left, [rows.part(s) for s in asked])
    enough = dict(zip(asked, found, strict=True))
    return [s for s in many if enough.get(s, True)]


def _is_enough_left(rows: Rows) -> bool:
    n = np.zeros(N_FOLDS, dtype=np.int64)
    for chunk in rows.chunks():
        n += np.bincount(chunk.fold[chunk.kept], minlength=N_FOLDS)
    return bool(n.sum() - n.max() >= LEAST_OWN_RECORDS)


def learn_members(rows: Rows, sources: list[str], folder: Path) -> Iterator[Learned]:
    """Yield the sources' own members in order, each from its own records and nothing else."""
    return rows.hands.each(partial(_learn_part, folder=folder), [rows.part(s) for s in sources])


def _learn_part(rows: Rows, folder: Path) -> Learned:
    return learn_member(rows, rows.sources[0], folder)


def learn_member(rows: Rows, source: str, folder: Path) -> Learned:
    """Learn one source's own member and score it on blocks of time it did not see.

    Where state channels may choose a regime, a tree for each combination is learned too,
    and kept if held-out records are less surprising by more than the doubt of that.
    Stretches of trouble are left out of the tables, and the rest is learned again; those
    that the rows leave out from the start are not looked at.
    """
    own = rows.of(source)
    in_alert = own.left_out.get(source, np.zeros((0, 2), dtype=np.int64))
    best = replace(_best(own, source, folder), in_alert=in_alert)
    left_out = find_trouble(own, source, best.held_out)
    if not left_out:
        return best
    best.held_out.path.unlink()
    best = replace(best, left_out=left_out)
    without = replace(own, left_out={source: best.unused})
    return replace(_best(without, source, folder), left_out=left_out, in_alert=in_alert)


def _best(own: Rows, source: str, folder: Path, shared: Shared | None = None) -> Learned:
    best, unseen = _plain(own, source, folder, shared)
    plain_density = best.density
    for regime in regimes_to_try(own.table):
        density = fit_regimes(own, plain_density, regime, shared=shared)
        if not density.regimes:
            continue
        settled = density if own.n_records >= SETTLED_RECORDS else None
        members = [
            member_of(source, fit_regimes(own, one, regime, _but(fold), settled, shared))
            for fold, one in enumerate(unseen)
        ]
        other = _measured(own, source, density, members, folder)
        better = _pays(best.held_out, other.held_out)
        (best if better else other).held_out.path.unlink()
        best = other if better else best
    return best


def share_tables(rows: Rows, learned: dict[str, Learned], folder: Path) -> dict[str, Learned]:
    """Let sources with little history take the fleet's structure and correlations.

    Bins, marginals and counts stay their own. Kept where the source's held-out records are
    less surprising so, whatever the doubt: hours or days of history hold few blocks of time to
    tell by, and what the fleet agrees on is the better guess. With half a day and a day at 120 s
    of one station of the invented plant, its later days were 18 and 14 nats a record less
    surprising for it.
    """
    if len(learned) < 2:
        return learned
    shared = _agreed(rows.table, learned)
    short = [s for s in learned if rows.spool.n_records(s) < SETTLED_RECORDS]
    items = [(rows.part(source), learned[source]) for source in short]
    work = partial(_shared_or_own, folder=folder, shared=shared)
    return learned | dict(zip(short, rows.hands.each(work, items), strict=True))


def _shared_or_own(item: tuple[Rows, Learned], folder: Path, shared: Shared) -> Learned:
    rows, one = item
    source = one.member.source
    other = _best(replace(rows, left_out={source: one.unused}), source, folder, shared)
    if not _pays(one.held_out, other.held_out, n_errors=0.0):
        return one
    member = replace(other.member, tables="shared")
    return replace(other, member=member, left_out=one.left_out, in_alert=one.in_alert)


def _agreed(table: ChannelTable, learned: dict[str, Learned]) -> Shared:
    shared: Shared = {(): agreed([one.density.plain for one in learned.values()], table)}
    keys = {key for one in learned.values() for key in one.density.regimes}
    for key in sorted(keys):
        trees = [o.density.regimes[key] for o in learned.values() if key in o.density.regimes]
        shared[key] = agreed(trees, table)
    return shared


def regimes_to_try(table: ChannelTable) -> list[tuple[int, ...]]:
    """Return combinations of state channels that may choose a tree, as nodes.

    What the site names in `regime` is the only one tried; an empty list there turns
    regimes off. Otherwise all state instruments together, if they are few.
    """
    number = {channel.name: k for k, channel in enumerate(table.instruments)}
    if table.regime is not None:
        return [tuple(number[name] for name in table.regime)] if table.regime else []
    states = tuple(k for k, channel in enumerate(table.instruments) if channel.is_state)
    return [states] if 0 < len(states) <= MAX_REGIME_STATES else []


def _plain(
    own: Rows, source: str, folder: Path, shared: Shared | None
) -> tuple[Learned, list[Density]]:
    """Learn the plain density, and one without each fold."""
    density = fit(own, shared=shared)
    settled = density if own.n_records >= SETTLED_RECORDS else None
    unseen = [fit(own, _but(fold), settled, shared) for fold in range(N_FOLDS)]
    members = [member_of(source, one) for one in unseen]
    return _measured(own, source, density, members, folder), unseen


def _measured(
    own: Rows, source: str, density: Density, unseen: list[Member], folder: Path
) -> Learned:
    final = member_of(source, density)
    held_out = hold_out(own, source, unseen, final, folder)
    return Learned(replace(final, usual=held_out.usual), density, held_out)


def _but(fold: int) -> tuple[int, ...]:
    return tuple(f for f in range(N_FOLDS) if f != fold)


def _pays(plain: HeldOut, other: HeldOut, n_errors: float = 1.0) -> bool:
    """Return whether the other's held-out surprise is lower by so many standard errors."""
    there = (plain.by_block[:, 1] > 0) & (other.by_block[:, 1] > 0)
    if there.sum() < 2:
        return False
    gain = plain.by_block[there] - other.by_block[there]
    per_block = gain[:, 0] / plain.by_block[there, 1]
    error = per_block.std(ddof=1) / np.sqrt(there.sum())
    return bool(per_block.mean() > n_errors * error)


def learn_fleet(rows: Rows, only: Learned | None) -> Member:
    """Learn the member for sources never seen, from the records of all.

    only: the one source's own, if there is just one.
    """
    if only is not None:
        return replace(only.member, source="", tables="shared")
    density = fit(rows)
    member = member_of("", density)
    return replace(member, usual=_unseen_usual(rows, member, density), tables="shared")


def _unseen_usual(rows: Rows, member: Member, density: Density) -> Usual:
    """Return what is usual for a source that the fleet's tables never saw.

    Sources are dealt to groups, and each group is scored by tables made from the others. A
    single source, whose history is too short for a member of its own, is dealt by blocks.
    """
    surprise, own, bins = [], [], []
    for seen, folds, out, folds_out in _splits(rows):
        unseen = member_of("", fit(seen, folds, like=density))
        values, _ = out.sample(folds_out)
        scored = score_values(unseen, rows, values)
        surprise.append(scored[0])
        own.append(scored[1])
        bins.append(member.bin_table.rows(values))
    return usual_of(np.concatenate(surprise), np.concatenate(own), np.concatenate(bins))


def _splits(rows: Rows) -> Iterator[tuple[Rows, tuple[int, ...], Rows, tuple[int, ...]]]:
    """Yield rows and folds to learn from, and rows and folds that those leave out."""
    everything = tuple(range(N_FOLDS))
    if len(rows.sources) == 1:
        yield from ((rows, _but(fold), rows, (fold,)) for fold in everything)
        return
    n_groups = min(SOURCE_GROUPS, len(rows.sources))
    for group in range(n_groups):
        out = rows.sources[group::n_groups]
        others = tuple(source for source in rows.sources if source not in out)
        yield rows.of(*others), everything, rows.of(*out), everything
