"""What the demo says: a stretch in two lines, the tables at its end.

Everything is plain text of about 100 columns, the same on a terminal and in a pipe.
"""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime

from training.channel_toml import text_table
from training.judging import Sum, Verdict
from training.known import Known
from training.plant.channels import INSTRUMENTS
from training.plant.incidents import KINDS, Incident
from training.stretches import OverLevel, Stretch

_UNITS = {instrument.name: instrument.unit for instrument in INSTRUMENTS}
OURS = "oddbranch"
# Sizes in spreads; the kinds without a size are a band of their own.
BANDS = ("below 3", "3 to 6", "6 and more", "no size")
# How the rows of the second table begin.
METHOD_ROWS = (
    *(f"caught, {band}" for band in BANDS),
    "caught, all",
    "caught with the right suspect",
    "median delay",
    "false in",
    "false a day",
    "quiet time over the level",
)


@dataclass(frozen=True, slots=True)
class Judged:
    """One method's verdict. quiet_share: of the time in which a stretch would have been
    false, the part it was over its level; a method over it all day has few stretches."""

    verdict: Verdict
    quiet_share: float

    def summed(self, at: Iterable[int]) -> Sum:
        """Return the sums over some incidents, by their place."""
        return Sum.of([self.verdict.findings[i] for i in at])


def band_of(size: float | None) -> str:
    """Return the band of an incident's size."""
    if size is None:
        return BANDS[3]
    return BANDS[0] if size < 3 else BANDS[1] if size < 6 else BANDS[2]


def stamp(time_ns: int) -> str:
    """Return a time to the minute, UTC."""
    return datetime.fromtimestamp(time_ns // 10**9, UTC).strftime("%Y-%m-%d %H:%M")


def duration(seconds: float) -> str:
    """Return a span of time as people say it."""
    minutes = round(seconds / 60)
    if minutes < 60:
        return f"{minutes} min"
    return f"{minutes // 60} h {minutes % 60:02d} min"


def stretch_lines(stretch: Stretch, truth: Incident | None) -> list[str]:
    """Return a stretch over its level, its suspect, and what truly was, as three lines."""
    n, long_s = len(stretch.over), (stretch.end_ns - stretch.start_ns) / 1e9
    lasted = f"{n} records in {duration(long_s)}" if n > 1 else "1 record"
    return [
        f"{stamp(stretch.start_ns)}  {stretch.source}, over the {stretch.kind} level: {lasted}",
        f"{'':18}suspect  {suspect_words(stretch.worst)}",
        f"{'':18}truth    {truth_words(stretch, truth)}",
    ]


def suspect_words(over: OverLevel) -> str:
    """Return the suspect, what it read and what it should have read."""
    if not over.suspect:
        return "none"
    unit = _UNITS.get(over.suspect, "")
    unit = f" {unit}" if unit else ""
    if over.word or over.word_expected:
        return f"{over.suspect}: said {over.word!r}, expected {over.word_expected!r}"
    if math.isnan(over.low) or math.isnan(over.high):
        return f"{over.suspect}: read {over.reading:g}{unit}"
    if math.isinf(over.low) and math.isinf(over.high):
        wanted = "anything (nothing like it was learned)"
    elif math.isinf(over.low):
        wanted = f"up to {over.high:g}{unit}"
    elif math.isinf(over.high):
        wanted = f"from {over.low:g}{unit}"
    else:
        wanted = f"{over.low:g} to {over.high:g}{unit}"
    return f"{over.suspect}: read {over.reading:g}{unit}, expected {wanted}"


def truth_words(stretch: Stretch, truth: Incident | None) -> str:
    """Return what truly was the matter, and how long before it had begun."""
    if truth is None:
        return "nothing was the matter"
    part = stretch.within(truth.start_ns, truth.end_ns)
    if part is None:
        return f"{incident_words(truth)}, over since {stamp(truth.end_ns)}"
    if stretch.start_ns < truth.start_ns:
        return f"{incident_words(truth)}, begun at {stamp(truth.start_ns)}, later than this"
    before = duration((part.start_ns - truth.start_ns) / 1e9)
    right = "right" if part.suspect in truth.channels else "wrong"
    return f"{incident_words(truth)}, begun {before} before; suspect {right}"


def incident_words(incident: Incident) -> str:
    """Return an incident as a few words."""
    kind = incident.kind.replace("_", " ")
    size = "" if incident.size is None else f", {incident.size:.1f} spreads"
    if KINDS[incident.kind].of_machine:
        where = f" of pump {incident.pump}" if incident.pump else ""
        return f"{kind}{where}{size}"
    return f"{kind} of {' and '.join(incident.channels)}{size}"


def incident_table(judged: Mapping[str, Judged]) -> str:
    """Return the incidents by kind and size, a row each; judged: by method, ours among them."""
    rivals = [name for name in judged if name != OURS]
    heading = ["kind", "spreads", "n", "caught", "median delay", "suspect right", *rivals]
    ours = judged[OURS].verdict.findings
    rows = []
    for kind in KINDS:
        for band in BANDS:
            at = [i for i, finding in enumerate(ours) if _is(finding.incident, kind, band)]
            if at:
                rows.append(_incident_row(kind, band, at, judged, rivals))
    return text_table(heading, rows, left=2)


def _is(incident: Known, kind: str, band: str) -> bool:
    return incident.kind == kind and band_of(incident.size) == band


def _incident_row(
    kind: str, band: str, at: Sequence[int], judged: Mapping[str, Judged], rivals: Sequence[str]
) -> list[str]:
    part = {name: one.summed(at) for name, one in judged.items()}
    ours = part[OURS]
    return [
        kind.replace("_", " "),
        band,
        str(ours.n),
        str(ours.n_caught),
        "" if ours.delay_s is None else duration(ours.delay_s),
        str(ours.n_first),
        *(str(part[name].n_caught) for name in rivals),
    ]


def method_table(judged: Mapping[str, Judged]) -> str:
    """Return the methods side by side: caught by size, suspects, delay, false stretches."""
    every = list(judged.values())
    first = every[0].verdict
    rows = []
    for band in BANDS:
        at = [i for i, one in enumerate(first.findings) if band_of(one.incident.size) == band]
        unit = "" if band == BANDS[-1] else " spreads"
        counts = [str(one.summed(at).n_caught) for one in every]
        rows.append([f"caught, {band}{unit} ({len(at)})", *counts])
    sums = [Sum.of(one.verdict.findings) for one in every]
    delays = ["" if one.delay_s is None else duration(one.delay_s) for one in sums]
    false = [one.verdict.false for one in every]
    rows += [
        [f"caught, all ({len(first.findings)})", *(str(one.n_caught) for one in sums)],
        ["caught with the right suspect", *(str(one.n_first) for one in sums)],
        ["median delay", *delays],
        [f"false in {first.quiet_days:.1f} quiet station-days", *(str(len(f)) for f in false)],
        ["false a day", *(f"{one.verdict.false_per_day:.1f}" for one in every)],
        ["quiet time over the level", *(f"{100 * one.quiet_share:.2f} %" for one in every)],
    ]
    return text_table(["", *judged], rows)


def where_others_win(judged: Mapping[str, Judged]) -> list[str]:
    """Return a sentence for each rival: what it caught that ours missed, and the reverse."""
    ours = judged[OURS].verdict.findings
    lines = []
    for name, one in judged.items():
        if name == OURS:
            continue
        pairs = list(zip(ours, one.verdict.findings, strict=True))
        theirs = [b.incident for a, b in pairs if b.call is not None and a.call is None]
        n_ours = sum(a.call is not None and b.call is None for a, b in pairs)
        line = (
            f"{name} caught {len(theirs)} that {OURS} missed{_listed(theirs)}, and missed {n_ours}"
        )
        lines += textwrap.wrap(f"{line} that {OURS} caught.", 100, subsequent_indent="  ")
    return lines


def _listed(incidents: Iterable[Known]) -> str:
    counted: dict[str, int] = {}
    for incident in incidents:
        words = f"{incident.kind.replace('_', ' ')} {band_of(incident.size)}"
        counted[words] = counted.get(words, 0) + 1
    listed = ", ".join(f"{n} {words}" if n > 1 else words for words, n in counted.items())
    return f" ({listed})" if listed else ""
