"""Surprise, removal and belief under a member: one tree, or a tree for each regime.

Where regime channels are read, one part holds and the kernels run on its tree. Where
one of them is missing, or is itself removed, the parts are mixed by their shares.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows
from scoring.kernels import belief_row, evidence_rows, removal_rows
from scoring.model import Member

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def surprise_of(member: Member, rows: BinRows) -> Floats:
    """Return -ln p(observed bins) of each row, (n,) nats. rows: (n, n_nodes) uint8."""
    if len(member.parts) == 1:
        return -evidence_rows(member.parts[0].tree.arrays, rows)
    out = np.empty(len(rows))
    for part, where in rows_by_part(member, rows):
        out[where] = -evidence_rows(member.parts[part].tree.arrays, rows[where])
        out[where] -= member.parts[part].log_share
    mixed = np.flatnonzero(_unread(member, rows))
    if len(mixed):
        out[mixed] = -_mixed_evidence(member, rows[mixed])
    return out


def removal_of(
    member: Member, rows: BinRows, group_start: Ints, group_nodes: Ints
) -> tuple[Floats, Floats]:
    """Return surprise (n,) and each instrument's own surprise (n, n_instruments), nats.

    An instrument's own surprise is -ln p(its bins | all other readings), its derived
    channels removed with it; NaN where it is missing.
    """
    if len(member.parts) == 1:
        evidence, own = removal_rows(member.parts[0].tree.arrays, rows, group_start, group_nodes)
        return -evidence, own
    n_instruments = len(group_start) - 1
    surprise, own = np.empty(len(rows)), np.full((len(rows), n_instruments), np.nan)
    for part, where in rows_by_part(member, rows):
        tree = member.parts[part].tree.arrays
        evidence, own[where] = removal_rows(tree, rows[where], group_start, group_nodes)
        surprise[where] = -evidence - member.parts[part].log_share
    mixed = np.flatnonzero(_unread(member, rows))
    if len(mixed):
        surprise[mixed] = -_mixed_evidence(member, rows[mixed])
        for i in range(n_instruments):
            own[mixed, i] = _without(member, rows[mixed], i, group_start, group_nodes)
            own[mixed, i] = surprise[mixed] - own[mixed, i]
            own[mixed[rows[mixed, i] == MISSING], i] = np.nan
    whole = np.flatnonzero(~_unread(member, rows)) if len(mixed) else np.arange(len(rows))
    alone = [i for i in member.regime if group_start[i + 1] == group_start[i]]
    if len(whole) and alone:
        own[np.ix_(whole, np.array(alone))] = _one_by_one(
            member, rows[whole], surprise[whole], alone
        )
    for i in set(member.regime) - set(alone):
        rest = _without(member, rows[whole], i, group_start, group_nodes)
        own[whole, i] = surprise[whole] - rest
    return surprise, own


def _one_by_one(member: Member, rows: BinRows, surprise: Floats, channels: list[int]) -> Floats:
    """Return the own surprise of regime channels with nothing derived from them.

    rows: (n, n_nodes), all of the regime read. Each channel's bins are tried in turn,
    whichever part holds then. Returns (n, n_channels) nats.
    """
    n_bins = [member.bins[node].n_bins for node in channels]
    trial = np.repeat(rows[:, None, :], sum(n_bins), axis=1)
    first = 0
    for node, n in zip(channels, n_bins, strict=True):
        trial[:, first : first + n, node] = np.arange(n)
        first += n
    logs = -surprise_of(member, trial.reshape(-1, rows.shape[1])).reshape(len(rows), -1)
    ends = np.cumsum(n_bins).tolist()
    rest: list[Floats] = [
        np.logaddexp.reduce(logs[:, end - n : end], axis=1)
        for end, n in zip(ends, n_bins, strict=True)
    ]
    return np.asarray(surprise[:, None] + np.stack(rest, axis=1))


def belief_of(member: Member, row: BinRows, node: int) -> Floats:
    """Return p(bins of `node` | the rest of `row`), (n_bins,); `node` is hidden first."""
    hidden = row.copy()
    hidden[node] = MISSING
    n_bins = member.bins[node].n_bins
    if len(member.parts) == 1:
        return belief_row(member.parts[0].tree.arrays, hidden, node)[:n_bins]
    if node not in member.regime and not _unread(member, hidden[None, :])[0]:
        part = rows_by_part(member, hidden[None, :])[0][0]
        return belief_row(member.parts[part].tree.arrays, hidden, node)[:n_bins]
    # Which part holds is open, so every bin is tried.
    trial = np.repeat(hidden[None, :], n_bins, axis=0)
    trial[:, node] = np.arange(n_bins)
    logs = -surprise_of(member, trial)
    weights = np.exp(logs - logs.max())
    return np.asarray(weights / weights.sum())


def _unread(member: Member, rows: BinRows) -> NDArray[np.bool_]:
    return np.asarray((rows[:, list(member.regime)] == MISSING).any(axis=1))


def rows_by_part(member: Member, rows: BinRows) -> list[tuple[int, Ints]]:
    """Return each part that holds somewhere with the numbers of its rows.

    Rows of which a regime channel is not read are in none.
    """
    if len(member.parts) == 1:
        return [(0, np.arange(len(rows)))]
    codes = rows[:, list(member.regime)]
    free = ~_unread(member, rows)
    found: list[tuple[int, Ints]] = []
    for k, part in enumerate(member.parts):
        if part.key is None:
            continue
        holds = free & (codes == np.array(part.key, dtype=np.uint8)).all(axis=1)
        free &= ~holds
        if holds.any():
            found.append((k, np.flatnonzero(holds)))
    if free.any():
        found.append((len(member.parts) - 1, np.flatnonzero(free)))
    return found


def _part_evidence(member: Member, k: int, rows: BinRows) -> Floats:
    """Return ln(share * p_k(observed)) of rows with part k's regime where missing.

    -inf where a regime channel that is read contradicts the part. For the last part the
    named combinations are taken out of the sum over what is missing.
    """
    part = member.parts[k]
    tree = part.tree.arrays
    if part.key is not None:
        codes = rows[:, list(member.regime)]
        fits = ((codes == np.array(part.key, dtype=np.uint8)) | (codes == MISSING)).all(axis=1)
        out = np.full(len(rows), -np.inf)
        if fits.any():
            # What is missing of the regime is filled in: the part holds for one value of it.
            filled = rows[fits]
            filled[:, list(member.regime)] = np.array(part.key, dtype=np.uint8)
            out[fits] = evidence_rows(tree, filled) + part.log_share
        return out
    everything = evidence_rows(tree, rows)
    named = np.full(len(rows), -np.inf)
    for other in member.parts[:-1]:
        assert other.key is not None
        filled = rows.copy()
        filled[:, list(member.regime)] = np.array(other.key, dtype=np.uint8)
        codes = rows[:, list(member.regime)]
        fits = ((codes == filled[:, list(member.regime)]) | (codes == MISSING)).all(axis=1)
        if fits.any():
            named[fits] = np.logaddexp(named[fits], evidence_rows(tree, filled[fits]))
    # What is left can round to nothing; a floor keeps it finite.
    left = np.log(np.maximum(-np.expm1(np.minimum(named - everything, 0.0)), 1e-300))
    return np.asarray(everything + left + part.log_share)


def _mixed_evidence(member: Member, rows: BinRows) -> Floats:
    total = _part_evidence(member, 0, rows)
    for k in range(1, len(member.parts)):
        total = np.logaddexp(total, _part_evidence(member, k, rows))
    return total


def _without(member: Member, rows: BinRows, i: int, group_start: Ints, group_nodes: Ints) -> Floats:
    """Return the surprise of rows with instrument i and its derived channels hidden."""
    hidden = rows.copy()
    hidden[:, i] = MISSING
    hidden[:, group_nodes[group_start[i] : group_start[i + 1]]] = MISSING
    return surprise_of(member, hidden)
