"""What was left out of the tables, in words, for the terminal and for the report."""

from __future__ import annotations

from collections.abc import Sequence

from training.levels import Curve
from training.trouble import Stretch


def trouble_words(stretches: Sequence[Stretch], curve: Curve, n_in_alert: int = 0) -> str:
    """Return how much the tables did not use, and the alert rates with and without it.

    stretches: found by their surprise. n_in_alert: known beforehand, because in alert.
    """
    days = curve.source_days / curve.n_sources
    seen = int(curve.seen[curve.chosen])
    n = len(stretches)
    share = f"({100 * curve.left_share:.2f} % of the records)"
    many = n + n_in_alert != 1
    if n_in_alert:
        also = f" and {_stretches(n)} far more surprising than the rest" if n else ""
        what = f"{_stretches(n_in_alert)} in alert{also} {share}"
    else:
        what = (
            f"{_stretches(n)} {share} {'are' if many else 'is'} far more surprising than the rest"
        )
    return (
        f"{what}: tables do not use {'them' if many else 'it'}, levels do; at these levels "
        f"{seen / days:.2f} alerts a day with {'them' if many else 'it'}, "
        f"{curve.seen_without / days:.2f} without"
    )


def _stretches(n: int) -> str:
    return f"{n} stretch{'es' if n != 1 else ''}"
