"""Excess: surprise against what is usual for the same source and the same readings.

A record with gaps has fewer terms, so its surprise is compared with held-out records
under the same gaps: less their median, rescaled so that their 99 % point falls where a
full record's falls. The two figures per mask are kept in a bounded cache.
"""

from __future__ import annotations

from collections import OrderedDict
from functools import cached_property
from threading import Lock

import numpy as np
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows
from scoring.density import rows_by_part, surprise_of
from scoring.kernels import removal_rows
from scoring.model import Member

Floats = NDArray[np.float64]

# Masks kept per member. A fleet in trouble shows a few dozen; each entry is two numbers.
MAX_MASKS = 4096
# With this many held-out records that truly had the mask, only they are used.
ENOUGH_TRUE_ROWS = 200
# A rescaling beyond this would make a verdict of noise.
MAX_STRETCH = 20.0


class ExcessScale:
    """Turns the surprise of one member's records into excess; safe between threads."""

    def __init__(self, member: Member) -> None:
        self._member = member
        self._known: OrderedDict[bytes, tuple[float, float]] = OrderedDict()
        self._lock = Lock()
        rows = member.usual.rows
        self._full = surprise_of(member, rows)
        self._missing = np.ascontiguousarray((rows == MISSING).T)
        whole = ~self._missing.any(axis=0)
        enough = whole.sum() >= ENOUGH_TRUE_ROWS
        self._drawn = _middle_and_high(self._full[whole] if enough else self._full)

    def excess(self, rows: BinRows, surprise: Floats) -> Floats:
        """Return (n,) excess in nats of records with bins `rows` (n, n_nodes)."""
        usual = self._member.usual
        hidden = rows == MISSING
        out = surprise - usual.median
        gaps = np.flatnonzero(hidden.any(axis=1))
        if not len(gaps):
            return out
        packed = np.packbits(hidden[gaps], axis=1)
        keys = packed.view(np.dtype((np.void, packed.shape[1]))).reshape(-1)
        _, first, which = np.unique(keys, return_index=True, return_inverse=True)
        ends = np.cumsum(np.bincount(which))[:-1]
        for one, where in zip(first, np.split(np.argsort(which, kind="stable"), ends), strict=True):
            middle, stretch = self._scale(hidden[gaps[one]])
            at = gaps[where]
            out[at] = (surprise[at] - middle) * stretch
        return out

    def _scale(self, mask: NDArray[np.bool_]) -> tuple[float, float]:
        key = np.packbits(mask).tobytes()
        with self._lock:
            if key in self._known:
                self._known.move_to_end(key)
                return self._known[key]
        found = self._measure(mask)
        with self._lock:
            self._known[key] = found
            if len(self._known) > MAX_MASKS:
                self._known.popitem(last=False)
        return found

    def _measure(self, mask: NDArray[np.bool_]) -> tuple[float, float]:
        """Return the usual median under a mask and the stretch to a full record's scale."""
        usual = self._member.usual
        middle, high = _middle_and_high(self._under(mask))
        # The kept rows are scored by tables that may have seen them; the figures of a full
        # record were not. The difference is added, so that both speak of unseen records.
        full_middle, full_high = self._drawn
        stretch = (full_high - full_middle) / max(high - middle, 1e-9)
        unseen = usual.median - full_middle
        share = min(1.0, middle / full_middle) if full_middle > 0 else 1.0
        return middle + unseen * max(share, 0.0), min(stretch, MAX_STRETCH)

    def _under(self, mask: NDArray[np.bool_]) -> Floats:
        """Return the kept records' surprise under a mask: of those that truly had it, if enough.

        A node whose neighbours are read takes its own surprise with it when it goes, so most
        masks cost a few subtractions; only where missing nodes touch is anything summed out.
        """
        member, rows = self._member, self._member.usual.rows
        true = self._true.get(np.packbits(mask).tobytes())
        if true is not None:
            return self._full[true]
        around = np.asarray(self._touching[mask].any(axis=0))
        anew: NDArray[np.bool_] = np.ones(len(rows), dtype=bool)
        if not (around & mask).any() and not mask[list(member.regime)].any():
            around[list(member.regime)] = True
            anew = np.asarray(self._missing[around].any(axis=0))
        surprise = self._full - self._own[mask].sum(axis=0)
        anew |= ~np.isfinite(surprise)
        if anew.any():
            masked = rows[anew]
            masked[:, mask] = MISSING
            surprise[anew] = surprise_of(member, masked)
        return np.asarray(surprise)

    @cached_property
    def _true(self) -> dict[bytes, NDArray[np.int64]]:
        """The kept records of each mask that enough of them truly had."""
        found: dict[bytes, list[int]] = {}
        for k, packed in enumerate(np.packbits(self._missing.T, axis=1)):
            found.setdefault(packed.tobytes(), []).append(k)
        return {key: np.array(at) for key, at in found.items() if len(at) >= ENOUGH_TRUE_ROWS}

    @cached_property
    def _touching(self) -> NDArray[np.bool_]:
        """Which nodes share an edge in any part, (n_nodes, n_nodes)."""
        touching = np.zeros((len(self._missing),) * 2, dtype=bool)
        for part in self._member.parts:
            left, right = part.tree.edges.reshape(-1, 2).T
            touching[left, right] = touching[right, left] = True
        return touching

    @cached_property
    def _own(self) -> Floats:
        """Every node's own surprise in the kept records, (n_nodes, m), nought where missing."""
        member, rows = self._member, self._member.usual.rows
        alone = np.zeros(rows.shape[1] + 1, dtype=np.int64), np.zeros(0, dtype=np.int64)
        own = np.zeros(rows.shape)
        if len(member.parts) == 1:
            own = removal_rows(member.parts[0].tree.arrays, rows, *alone)[1]
        else:
            for part, where in rows_by_part(member, rows):
                own[where] = removal_rows(member.parts[part].tree.arrays, rows[where], *alone)[1]
        return np.ascontiguousarray(np.where(rows == MISSING, 0.0, own).T)


def _middle_and_high(surprise: Floats) -> tuple[float, float]:
    """Return the median and the 99 % point, interpolated as numpy.quantile does."""
    if not len(surprise):
        return 0.0, 1.0
    at = (len(surprise) - 1) * np.array([0.5, 0.99])
    low = at.astype(np.int64)
    high = np.minimum(low + 1, len(surprise) - 1)
    # One partition for both: a mask that was never met costs hardly more than this.
    order = np.partition(surprise, np.unique(np.concatenate([low, high])))
    middle, top = order[low] + (at - low) * (order[high] - order[low])
    return float(middle), float(top)
