"""Incidents held against stretches: caught, missed, false."""

from __future__ import annotations

import pytest

from training.plant.incidents import Incident
from training.stretches import OverLevel, Stretch
from training.verdicts import BANDS, Judgement, band_of, judge, truth_of

HOUR_NS = 3600 * 10**9
RECOVERY_NS = HOUR_NS


def an_incident(start_h: float, end_h: float, source: str = "a", size: float = 4.0) -> Incident:
    """Return an offset of the flow meter."""
    return Incident(source, int(start_h * HOUR_NS), int(end_h * HOUR_NS), "offset", size, ("flow",))


def a_stretch(*hours: float, source: str = "a", suspect: str = "flow") -> Stretch:
    """Return a stretch with records over the level at some hours."""
    return Stretch(
        source, tuple(OverLevel(source, int(h * HOUR_NS), "record", suspect) for h in hours)
    )


def judged(incidents: list[Incident], *stretches: Stretch) -> Judgement:
    """Judge over two days of one source."""
    return judge(incidents, stretches, RECOVERY_NS, 48 * HOUR_NS)


def test_a_record_over_the_level_inside_an_incident_catches_it() -> None:
    result = judged([an_incident(10, 12)], a_stretch(10.5, 11))
    (verdict,) = result.verdicts
    assert (verdict.caught, verdict.right, verdict.delay_s) == (True, True, 1800.0)
    assert (result.n_caught, result.n_right, result.delay_s, result.false) == (1, 1, 1800.0, ())


def test_the_end_of_an_incident_is_no_longer_inside_it() -> None:
    result = judged([an_incident(10, 12)], a_stretch(12))
    assert not result.verdicts[0].caught
    assert result.false == ()


def test_a_stretch_after_the_recovery_is_false() -> None:
    late = a_stretch(13.5)
    result = judged([an_incident(10, 12)], late)
    assert (result.false, result.n_caught, result.delay_s) == ((late,), 0, None)


def test_another_source_catches_nothing() -> None:
    elsewhere = a_stretch(11, source="b")
    result = judged([an_incident(10, 12)], elsewhere)
    assert (result.n_caught, result.false) == (0, (elsewhere,))


def test_the_suspect_is_judged_on_what_came_inside_the_incident() -> None:
    before = OverLevel("a", 9 * HOUR_NS, "record", "power", 50.0)
    inside = OverLevel("a", 11 * HOUR_NS, "record", "flow", 5.0)
    result = judged([an_incident(10, 12)], Stretch("a", (before, inside)))
    assert result.verdicts[0].right


def test_a_wrong_suspect_still_catches() -> None:
    result = judged([an_incident(10, 12)], a_stretch(11, suspect="power"))
    assert (result.n_caught, result.n_right) == (1, 0)


def test_quiet_time_leaves_out_incidents_and_recoveries_once_each() -> None:
    result = judged([an_incident(10, 12), an_incident(12.5, 14)])
    # 48 h less 10 h to 15 h, which the first recovery and the second incident share in part.
    assert result.quiet_days == pytest.approx((48 - 5) / 24)


def test_records_over_the_level_in_quiet_time_are_counted_also_in_a_long_stretch() -> None:
    result = judged([an_incident(10, 12)], a_stretch(8, 9, 10.5, 12.5, 13.5))
    assert (result.false, result.n_quiet_over, result.n_caught) == ((), 3, 1)


@pytest.mark.parametrize(
    ("size", "band"),
    [(2.99, "below 3"), (3.0, "3 to 6"), (5.99, "3 to 6"), (6.0, "6 and more")],
)
def test_an_incident_is_in_the_band_of_its_size(size: float, band: str) -> None:
    assert band_of(an_incident(0, 1, size=size)) == band


def test_a_kind_without_size_is_a_band_of_its_own() -> None:
    assert band_of(Incident("a", 0, 1, "stuck", None, ("flow",))) == BANDS[-1]


def test_the_truth_of_a_stretch_is_the_incident_it_touches() -> None:
    known = [an_incident(10, 12), an_incident(20, 22), an_incident(20, 22, source="b")]
    assert truth_of(a_stretch(11), known, RECOVERY_NS) is known[0]
    assert truth_of(a_stretch(12.5), known, RECOVERY_NS) is known[0]
    assert truth_of(a_stretch(15), known, RECOVERY_NS) is None
    assert truth_of(a_stretch(21, source="b"), known, RECOVERY_NS) is known[2]
