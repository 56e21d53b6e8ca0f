"""A member for each source, one for the fleet, and the held-out scores of each."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

from scoring.model import Member
from training.blocks import N_FOLDS
from training.crossfit import HeldOut, hold_out, member_of, score_values, usual_of
from training.fit import Density, fit
from training.rows import Rows

# A source with fewer records is scored by the fleet's member.
LEAST_OWN_RECORDS = 200
# From this many records on, held-out tables keep the structure and choices that all
# records chose: what that leaks is far below what it saves.
SETTLED_RECORDS = 20_000


@dataclass(frozen=True)
class Learned:
    """One member with how it was learned."""

    member: Member
    density: Density
    held_out: HeldOut


def learn_member(rows: Rows, source: str, folder: Path) -> Learned:
    """Learn one source's own member and score it on blocks of time it did not see."""
    own = rows.of(source)
    density = fit(own)
    settled = own.n_records >= SETTLED_RECORDS
    edges = [(int(a), int(b)) for a, b in density.tree.edges] if settled else None
    choice = density.choice if settled else None
    unseen = [
        member_of(source, fit(own, tuple(f for f in range(N_FOLDS) if f != fold), choice, edges))
        for fold in range(N_FOLDS)
    ]
    final = member_of(source, density)
    held_out = hold_out(rows, source, unseen, final, folder)
    return Learned(replace(final, usual=held_out.usual), density, held_out)


def learn_fleet(rows: Rows, only: Learned | None) -> Member:
    """Learn the member for sources never seen, from the records of all.

    only: the one source's own, if there is just one.
    """
    if only is not None:
        return replace(only.member, source="", tables="shared")
    density = fit(rows)
    member = member_of("", density)
    sample = rows.sample(tuple(range(N_FOLDS)))
    usual = usual_of(*score_values(member, rows, sample), member.bin_table.rows(sample))
    return replace(member, usual=usual, tables="shared")
