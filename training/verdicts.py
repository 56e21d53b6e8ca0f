"""Known incidents held against stretches over a level: caught or not, when, by whom named.

An incident is caught when a record inside it is over the level; a stretch is false when
it touches neither an incident nor the time a machine needs to recover from one. Nothing
here knows which method gave the stretches, so every method is judged alike.
"""

from __future__ import annotations

import statistics
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from training.plant.incidents import Incident
from training.stretches import Stretch

# From a time up to, not including, another, in ns.
Period = tuple[int, int]

# Sizes in spreads; the unsized kinds are a band of their own.
BANDS = ("below 3", "3 to 6", "6 and more", "no size")


@dataclass(frozen=True, slots=True)
class Verdict:
    """What a method made of one incident.

    stretch: of the first stretch that has a record inside the incident, the part inside;
    None for a miss. delay_s: from the incident's start to its first record.
    """

    incident: Incident
    stretch: Stretch | None = None
    delay_s: float | None = None

    @property
    def caught(self) -> bool:
        """Whether anything was raised while it lasted."""
        return self.stretch is not None

    @property
    def right(self) -> bool:
        """Whether the suspect is one of the channels that are truly affected."""
        return self.stretch is not None and self.stretch.suspect in self.incident.channels


@dataclass(frozen=True, slots=True)
class Judgement:
    """One method's verdicts on all incidents, in their order, and its false stretches.

    quiet_days: source-days without an incident or a recovery from one. n_quiet_over:
    records over the level in that time; a method that is over it all day has few
    stretches and many of these.
    """

    verdicts: tuple[Verdict, ...]
    false: tuple[Stretch, ...] = ()
    quiet_days: float = 0.0
    n_quiet_over: int = 0

    @property
    def n_caught(self) -> int:
        """How many incidents were caught."""
        return sum(verdict.caught for verdict in self.verdicts)

    @property
    def n_right(self) -> int:
        """How many were caught with the right suspect."""
        return sum(verdict.right for verdict in self.verdicts)

    @property
    def delay_s(self) -> float | None:
        """The median delay of those caught; None if none was."""
        delays = [v.delay_s for v in self.verdicts if v.delay_s is not None]
        return statistics.median(delays) if delays else None


def judge(
    incidents: Sequence[Incident],
    stretches: Iterable[Stretch],
    recovery_ns: int,
    n_source_ns: int,
) -> Judgement:
    """Return the verdicts of one method.

    recovery_ns: after an incident's end a stretch is not false for this long.
    n_source_ns: the length of time judged, summed over sources.
    """
    by_source: dict[str, list[Stretch]] = {}
    for stretch in stretches:
        by_source.setdefault(stretch.source, []).append(stretch)
    periods: dict[str, list[Period]] = {}
    for incident in incidents:
        period = (incident.start_ns, incident.end_ns + recovery_ns)
        periods.setdefault(incident.source, []).append(period)
    found = [(s, periods.get(source, [])) for source, own in by_source.items() for s in own]
    false = [s for s, own in found if not any(_touches(s, period) for period in own)]
    busy_ns = sum(end - start for own in periods.values() for start, end in _union(own))
    return Judgement(
        verdicts=tuple(_verdict(i, by_source.get(i.source, [])) for i in incidents),
        false=tuple(sorted(false, key=lambda s: (s.start_ns, s.source))),
        quiet_days=max(n_source_ns - busy_ns, 0) / 86_400e9,
        n_quiet_over=sum(_n_outside(s, own) for s, own in found),
    )


def _touches(stretch: Stretch, period: Period) -> bool:
    return stretch.end_ns >= period[0] and stretch.start_ns < period[1]


def _n_outside(stretch: Stretch, periods: list[Period]) -> int:
    near = [period for period in periods if _touches(stretch, period)]
    return sum(not any(s <= o.time_ns < e for s, e in near) for o in stretch.over)


def _verdict(incident: Incident, stretches: list[Stretch]) -> Verdict:
    for stretch in sorted(stretches, key=lambda s: s.start_ns):
        part = stretch.within(incident.start_ns, incident.end_ns)
        if part is not None:
            return Verdict(incident, part, (part.start_ns - incident.start_ns) / 1e9)
    return Verdict(incident)


def _union(periods: list[Period]) -> list[Period]:
    """Return the periods with those that overlap as one."""
    merged: list[Period] = []
    for start, end in sorted(periods):
        if merged and start <= merged[-1][1]:
            merged[-1] = (merged[-1][0], max(merged[-1][1], end))
        else:
            merged.append((start, end))
    return merged


def band_of(incident: Incident) -> str:
    """Return the size band of an incident."""
    if incident.size is None:
        return BANDS[3]
    return BANDS[0] if incident.size < 3 else BANDS[1] if incident.size < 6 else BANDS[2]


def truth_of(stretch: Stretch, incidents: Iterable[Incident], recovery_ns: int) -> Incident | None:
    """Return the incident that a stretch touches, its recovery included; None for none."""
    touched = (
        incident
        for incident in incidents
        if incident.source == stretch.source
        and _touches(stretch, (incident.start_ns, incident.end_ns + recovery_ns))
    )
    return min(touched, key=lambda incident: incident.start_ns, default=None)
