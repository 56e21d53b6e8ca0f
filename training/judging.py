"""Alerts held against known incidents: caught or missed, how late, by whom named; and false.

An incident is caught by the first alert that is raised at its source while it lasts. An
alert is false when it is raised outside every incident and outside the time that the
machine needs to recover from one; what is raised during recovery is neither.
"""

from __future__ import annotations

import bisect
import itertools
import statistics
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Final

from training.intervals import rate_limits, wilson
from training.known import Known

DAY_NS: Final = 86_400_000_000_000
# Edges of the size bands, in whatever measure the incidents' file uses.
SIZE_EDGES: Final = (1.5, 3.0, 6.0)


@dataclass(frozen=True, slots=True)
class Call:
    """An alert as far as judging it needs.

    cleared_ns: when it was cleared, or the end of the records. at_first: the suspect when
    it was raised. suspects: in the end, the likeliest first. kind: what raised it.
    """

    source: str
    raised_ns: int
    cleared_ns: int
    at_first: str = ""
    suspects: tuple[str, ...] = ()
    kind: str = ""


@dataclass(frozen=True, slots=True)
class Finding:
    """What became of one incident; call: the alert that caught it, None for a miss."""

    incident: Known
    call: Call | None = None

    @property
    def delay_s(self) -> float | None:
        """Seconds from the incident's start to the alert."""
        if self.call is None:
            return None
        return (self.call.raised_ns - self.incident.start_ns) / 1e9

    def right_in(self, n: int) -> bool:
        """Whether a truly concerned channel is among the first n suspects."""
        named = self.call.suspects[:n] if self.call else ()
        return bool(set(named) & set(self.incident.channels))

    @property
    def right_at_first(self) -> bool:
        """Whether the suspect was right already when the alert was raised."""
        return self.call is not None and self.call.at_first in self.incident.channels


@dataclass(frozen=True)
class Verdict:
    """What a method made of a stretch of records.

    findings: one for each incident, in their order. false: alerts outside incidents.
    n_alerts: all. n_after: raised during recovery. source_days: judged in all; quiet_days:
    those of them in which an alert would have been false. n_sources: how many.
    """

    findings: tuple[Finding, ...]
    false: tuple[Call, ...]
    n_alerts: int
    n_after: int
    source_days: float
    quiet_days: float
    n_sources: int

    @property
    def caught(self) -> tuple[Finding, ...]:
        """The findings that are no misses."""
        return tuple(one for one in self.findings if one.call is not None)

    @property
    def false_per_day(self) -> float:
        """False alerts a day over the whole fleet."""
        return len(self.false) / self.quiet_days * self.n_sources if self.quiet_days > 0 else 0.0

    @property
    def false_share(self) -> float:
        """Share of the quiet time that was spent in false alerts."""
        long_ns = sum(call.cleared_ns - call.raised_ns for call in self.false)
        return long_ns / DAY_NS / self.quiet_days if self.quiet_days > 0 else 0.0

    def false_limits(self, dispersion: float = 1.0) -> tuple[float, float]:
        """Return 95 % limits of `false_per_day`."""
        return rate_limits(len(self.false), self.quiet_days / self.n_sources, dispersion)

    @property
    def alerts_per_day(self) -> float:
        """All alerts a day over the whole fleet."""
        return self.n_alerts / self.source_days * self.n_sources if self.source_days > 0 else 0.0


@dataclass(frozen=True, slots=True)
class Sum:
    """Findings summed up. n_first, n_three: right suspects among the first one and three;
    n_at_once: right when raised. delay_s: median of those caught, late_s: their 90 % point."""

    n: int
    n_caught: int
    n_first: int
    n_three: int
    n_at_once: int
    delay_s: float | None
    late_s: float | None

    @classmethod
    def of(cls, findings: Sequence[Finding]) -> Sum:
        """Return the sums over some findings."""
        delays = sorted(one.delay_s for one in findings if one.delay_s is not None)
        late = delays[min(len(delays) - 1, int(0.9 * len(delays)))] if delays else None
        return cls(
            len(findings),
            sum(one.call is not None for one in findings),
            sum(one.right_in(1) for one in findings),
            sum(one.right_in(3) for one in findings),
            sum(one.right_at_first for one in findings),
            statistics.median(delays) if delays else None,
            late,
        )

    @property
    def caught_limits(self) -> tuple[float, float]:
        """95 % limits of the share caught."""
        return wilson(self.n_caught, self.n)


@dataclass(frozen=True)
class Judge:
    """Holds alerts of any method against the same incidents.

    known: in order of source and start. recovery_ns: after an incident's end an alert is
    not false for this long. spans: by source, the time of its first and last record.
    step_ns: the usual interval, so that a lone record has a span.
    """

    known: Sequence[Known]
    recovery_ns: int
    spans: Mapping[str, tuple[int, int]]
    step_ns: int
    _busy: dict[str, list[tuple[int, int]]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for source in self.spans:
            own = [one for one in self.known if one.source == source]
            periods = [(one.start_ns, one.end_ns + self.recovery_ns) for one in own]
            self._busy[source] = _union(periods)

    def verdict(self, calls: Iterable[Call]) -> Verdict:
        """Return what the alerts, in any order, are worth."""
        calls = sorted(calls, key=lambda call: call.raised_ns)
        by_source: dict[str, list[Call]] = {}
        for call in calls:
            by_source.setdefault(call.source, []).append(call)
        raised = {s: [call.raised_ns for call in found] for s, found in by_source.items()}
        findings = []
        for one in self.known:
            at = bisect.bisect_left(raised.get(one.source, []), one.start_ns)
            own = by_source.get(one.source, [])
            first = own[at] if at < len(own) and own[at].raised_ns < one.end_ns else None
            findings.append(Finding(one, first))
        inside = sum(self._is_inside(call) for call in calls)
        false = tuple(call for call in calls if not self._is_busy(call))
        return Verdict(
            tuple(findings),
            false,
            len(calls),
            len(calls) - len(false) - inside,
            self.source_days,
            self.source_days - self._busy_ns() / DAY_NS,
            len(self.spans),
        )

    @property
    def source_days(self) -> float:
        """Judged time summed over sources."""
        return sum(b - a + self.step_ns for a, b in self.spans.values()) / DAY_NS

    def _is_inside(self, call: Call) -> bool:
        return any(
            one.source == call.source and one.start_ns <= call.raised_ns < one.end_ns
            for one in self.known
        )

    def _is_busy(self, call: Call) -> bool:
        busy = self._busy.get(call.source, [])
        at = bisect.bisect_right(busy, (call.raised_ns, 1 << 63)) - 1
        return at >= 0 and call.raised_ns < busy[at][1]

    def _busy_ns(self) -> int:
        total = 0
        for source, (first, last) in self.spans.items():
            for start, end in self._busy[source]:
                total += max(0, min(end, last + self.step_ns) - max(start, first))
        return total


def _union(periods: Iterable[tuple[int, int]]) -> list[tuple[int, int]]:
    """Return the periods in order, with those that touch as one."""
    merged: list[tuple[int, int]] = []
    for start, end in sorted(periods):
        if merged and start <= merged[-1][1]:
            merged[-1] = (merged[-1][0], max(merged[-1][1], end))
        else:
            merged.append((start, end))
    return merged


def band_of(size: float | None) -> str:
    """Return the size band of an incident in words."""
    if size is None:
        return "no size"
    if size < SIZE_EDGES[0]:
        return f"below {SIZE_EDGES[0]:g}"
    for low, high in itertools.pairwise(SIZE_EDGES):
        if size < high:
            return f"{low:g} to {high:g}"
    return f"{SIZE_EDGES[-1]:g} and more"


def bands() -> tuple[str, ...]:
    """Return all size bands, small to large, then those without a size."""
    sizes = (0.0, *SIZE_EDGES)
    return (*(band_of(size) for size in sizes), band_of(None))


def grouped(findings: Iterable[Finding], key: str) -> dict[str, list[Finding]]:
    """Return findings by "kind" or by "size" band; kinds by name, bands small to large."""
    found: dict[str, list[Finding]] = {}
    for one in findings:
        name = one.incident.kind if key == "kind" else band_of(one.incident.size)
        found.setdefault(name, []).append(one)
    order = sorted(found) if key == "kind" else [band for band in bands() if band in found]
    return {name: found[name] for name in order}
