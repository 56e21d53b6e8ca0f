"""What tables did not use is told with the alert rates with and without it."""

from __future__ import annotations

from dataclasses import replace

from tests.learned import small_fleet
from training.levels import Curve
from training.trouble import Stretch
from training.trouble_words import trouble_words


def a_curve(n_seen: int, n_without: int) -> Curve:
    """Return a curve of two sources over 10 days each."""
    curve = small_fleet()[0].curve
    assert curve is not None
    seen = curve.seen.copy()
    seen[curve.chosen] = n_seen
    return replace(
        curve, seen=seen, seen_without=n_without, left_share=0.02, source_days=20.0, n_sources=2
    )


def test_both_rates_are_said_for_the_whole_fleet() -> None:
    text = trouble_words([Stretch("a", 0, 1, 5, 3.0)] * 3, a_curve(30, 5))
    assert text.startswith("3 stretches (2.00 % of the records) are far more surprising")
    assert text.endswith("3.00 alerts a day with them, 0.50 without")


def test_a_single_stretch_is_one() -> None:
    text = trouble_words([Stretch("a", 0, 1, 5, 3.0)], a_curve(3, 1))
    assert text.startswith("1 stretch (2.00 % of the records) is far more surprising")
    assert text.endswith("0.30 alerts a day with it, 0.10 without")


def test_stretches_in_alert_are_told_apart_from_those_found_by_their_surprise() -> None:
    text = trouble_words([Stretch("a", 0, 1, 5, 3.0)], a_curve(30, 5), n_in_alert=2)
    assert text.startswith(
        "2 stretches in alert and 1 stretch far more surprising than the rest (2.00 % of the"
    )
    assert trouble_words([], a_curve(3, 1), 1).startswith(
        "1 stretch in alert (2.00 % of the records): tables do not use it, levels do"
    )
