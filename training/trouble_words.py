"""What was left out of the tables, in words, for the terminal and for the report."""

from __future__ import annotations

from collections.abc import Sequence

from training.levels import Curve
from training.trouble import Stretch


def trouble_words(stretches: Sequence[Stretch], curve: Curve) -> str:
    """Return how much the tables did not use, and the alert rates with and without it."""
    days = curve.source_days / curve.n_sources
    seen = int(curve.seen[curve.chosen])
    n = len(stretches)
    return (
        f"{n} stretch{'es' if n != 1 else ''} ({100 * curve.left_share:.2f} % of the records) "
        f"{'are' if n != 1 else 'is'} far more surprising than the rest: tables do not use "
        f"{'them' if n != 1 else 'it'}, levels do; at these levels {seen / days:.2f} alerts a day "
        f"with {'them' if n != 1 else 'it'}, {curve.seen_without / days:.2f} without"
    )
