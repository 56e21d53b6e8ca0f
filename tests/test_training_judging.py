"""Alerts against incidents by hand: caught, late, false, during recovery, and whom they name."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from training.judging import DAY_NS, Call, Finding, Judge, Sum, band_of, bands, grouped
from training.known import Known

HOUR = 3_600_000_000_000


def known(start_h: float, end_h: float, source: str = "a", **more: object) -> Known:
    fields = {"kind": "offset", "size": 2.0, "channels": ("flow",)} | more
    return Known(source, int(start_h * HOUR), int(end_h * HOUR), **fields)  # type: ignore[arg-type]


def call(
    raised_h: float, source: str = "a", cleared_h: float | None = None, **more: object
) -> Call:
    end = raised_h + 1 if cleared_h is None else cleared_h
    return Call(source, int(raised_h * HOUR), int(end * HOUR), **more)  # type: ignore[arg-type]


def a_judge(*incidents: Known) -> Judge:
    """Two sources for 48 hours, two hours to recover, records an hour apart."""
    spans = dict.fromkeys("ab", (0, 47 * HOUR))
    return Judge(incidents, 2 * HOUR, spans, HOUR)


def test_the_first_alert_raised_while_it_lasts_catches_an_incident() -> None:
    verdict = a_judge(known(10, 14)).verdict([call(13), call(11), call(11, "b")])
    assert verdict.findings[0].call == call(11)
    assert verdict.findings[0].delay_s == 3600.0
    assert [one.source for one in verdict.false] == ["b"]


def test_an_alert_that_stood_already_catches_nothing() -> None:
    verdict = a_judge(known(10, 14)).verdict([call(9.5, cleared_h=13)])
    assert verdict.findings[0].call is None
    assert len(verdict.false) == 1


def test_an_alert_during_recovery_is_neither_a_catch_nor_false() -> None:
    verdict = a_judge(known(10, 14)).verdict([call(14), call(15.9), call(16)])
    assert verdict.findings[0].call is None
    assert verdict.n_after == 2
    assert verdict.false == (call(16),)


def test_quiet_time_is_what_incidents_and_recovery_leave() -> None:
    # 96 source-hours; 10 to 16 and 20 to 25 overlap recovery only at a, one runs off the end.
    verdict = a_judge(known(10, 14), known(15, 20), known(46, 90), known(0, 2, "b")).verdict([])
    assert verdict.source_days == pytest.approx(4.0)
    busy_h = (22 - 10) + (48 - 46) + 4
    assert verdict.quiet_days == pytest.approx(4.0 - busy_h / 24)


def test_rates_are_of_the_whole_fleet() -> None:
    verdict = a_judge().verdict([call(1), call(5), call(9, "b")])
    # Three in four source-days of two sources: 1.5 a day.
    assert verdict.alerts_per_day == pytest.approx(1.5)
    assert verdict.false_per_day == pytest.approx(1.5)
    assert verdict.false_share == pytest.approx(3 / 96)
    low, high = verdict.false_limits()
    assert low < 1.5 < high
    assert verdict.false_limits(4.0)[1] > high


def test_suspects_are_right_among_the_first_one_and_three_and_at_once() -> None:
    incident = known(0, 9, channels=("flow", "power"))
    finding = Finding(incident, call(1, at_first="power", suspects=("room", "speed", "flow")))
    assert not finding.right_in(1)
    assert finding.right_in(3)
    assert finding.right_at_first
    missed = Finding(incident)
    assert not missed.right_in(3)
    assert not missed.right_at_first
    assert missed.delay_s is None


def test_sums_have_medians_of_those_caught() -> None:
    findings = [
        Finding(known(0, 9), call(k, suspects=("flow",), at_first="flow")) for k in range(1, 6)
    ]
    total = Sum.of([*findings, Finding(known(0, 9))])
    assert (total.n, total.n_caught, total.n_first, total.n_three, total.n_at_once) == (
        6,
        5,
        5,
        5,
        5,
    )
    assert total.delay_s == 3 * 3600
    assert total.late_s == 5 * 3600
    assert total.caught_limits[0] < 5 / 6 < total.caught_limits[1]
    assert Sum.of([]).delay_s is None


def test_sizes_fall_into_bands_and_groups_keep_their_order() -> None:
    sizes = [0.5, 1.5, 2.9, 3.0, 5.9, 6.0, 40.0, None]
    words = ["below 1.5", *["1.5 to 3"] * 2, *["3 to 6"] * 2, *["6 and more"] * 2, "no size"]
    assert [band_of(size) for size in sizes] == words
    assert list(dict.fromkeys(words)) == list(bands())
    findings = [
        Finding(known(0, 1, size=size, kind=kind))
        for size, kind in zip([7.0, None, 1.0], ["swap", "leak", "drift"], strict=True)
    ]
    assert list(grouped(findings, "size")) == ["below 1.5", "6 and more", "no size"]
    assert list(grouped(findings, "kind")) == ["drift", "leak", "swap"]


@given(st.lists(st.tuples(st.integers(0, 47), st.sampled_from("ab")), max_size=12))
def test_every_alert_is_counted_once(raised: list[tuple[int, str]]) -> None:
    judge = a_judge(known(10, 14), known(12, 20, kind="leak"), known(30, 31, "b"))
    calls = [call(hour, source) for hour, source in raised]
    verdict = judge.verdict(calls)
    inside = sum(
        any(k.source == c.source and k.start_ns <= c.raised_ns < k.end_ns for k in judge.known)
        for c in calls
    )
    assert verdict.n_alerts == len(calls) == inside + verdict.n_after + len(verdict.false)


def test_a_day_has_its_nanoseconds() -> None:
    assert DAY_NS == 24 * HOUR
