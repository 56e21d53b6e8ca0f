"""Excess: surprise against what is usual for the same source and the same readings.

A record with gaps has fewer terms, so its surprise is compared with held-out records
under the same gaps: less their median, rescaled so that their 99 % point falls where a
full record's falls. The two figures per mask are kept in a bounded cache.
"""

from __future__ import annotations

from collections import OrderedDict
from threading import Lock

import numpy as np
from numpy.typing import NDArray

from scoring.bins import MISSING, BinRows
from scoring.density import surprise_of
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
        full = surprise_of(member, member.usual.rows)
        self._rows_missing = member.usual.rows == MISSING
        whole = ~self._rows_missing.any(axis=1)
        self._drawn = _middle_and_high(full[whole] if whole.sum() >= ENOUGH_TRUE_ROWS else full)

    def excess(self, rows: BinRows, surprise: Floats) -> Floats:
        """Return (n,) excess in nats of records with bins `rows` (n, n_nodes)."""
        usual = self._member.usual
        hidden = rows == MISSING
        out = surprise - usual.median
        gaps = np.flatnonzero(hidden.any(axis=1))
        if not len(gaps):
            return out
        masks, which = np.unique(hidden[gaps], axis=0, return_inverse=True)
        for k, mask in enumerate(masks):
            middle, stretch = self._scale(mask)
            where = gaps[which.reshape(-1) == k]
            out[where] = (surprise[where] - middle) * stretch
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
        true = (self._rows_missing == mask).all(axis=1)
        rows = usual.rows[true] if true.sum() >= ENOUGH_TRUE_ROWS else usual.rows.copy()
        rows[:, mask] = MISSING
        middle, high = _middle_and_high(surprise_of(self._member, rows))
        # The kept rows are scored by tables that may have seen them; the figures of a full
        # record were not. The difference is added, so that both speak of unseen records.
        full_middle, full_high = self._drawn
        stretch = (full_high - full_middle) / max(high - middle, 1e-9)
        unseen = usual.median - full_middle
        share = min(1.0, middle / full_middle) if full_middle > 0 else 1.0
        return middle + unseen * max(share, 0.0), min(stretch, MAX_STRETCH)


def _middle_and_high(surprise: Floats) -> tuple[float, float]:
    if not len(surprise):
        return 0.0, 1.0
    return float(np.median(surprise)), float(np.quantile(surprise, 0.99))
