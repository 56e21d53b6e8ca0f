"""What the demo says: a stretch in two lines, the tables at its end.

Everything is plain text of about 100 columns, the same on a terminal and in a pipe.
"""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from datetime import UTC, datetime

from training.channel_toml import text_table
from training.plant.channels import INSTRUMENTS
from training.plant.incidents import KINDS, Incident
from training.stretches import OverLevel, Stretch
from training.verdicts import BANDS, Judgement, Verdict, band_of

_UNITS = {instrument.name: instrument.unit for instrument in INSTRUMENTS}
# The table's order, and how the methods are called in it.
OURS = "oddbranch"


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


def incident_table(judged: Mapping[str, Judgement]) -> str:
    """Return the incidents by kind and size, a row each; judged: by method, ours among them."""
    rivals = [name for name in judged if name != OURS]
    heading = ["kind", "spreads", "n", "caught", "median delay", "suspect right", *rivals]
    ours = judged[OURS].verdicts
    rows = []
    for kind in KINDS:
        for band in BANDS:
            at = [i for i, v in enumerate(ours) if _is(v, kind, band)]
            if at:
                rows.append(_incident_row(kind, band, at, judged, rivals))
    return text_table(heading, rows, left=2)


def _is(verdict: Verdict, kind: str, band: str) -> bool:
    return verdict.incident.kind == kind and band_of(verdict.incident) == band


def _incident_row(
    kind: str, band: str, at: Sequence[int], judged: Mapping[str, Judgement], rivals: Sequence[str]
) -> list[str]:
    part = {name: _part(judgement, at) for name, judgement in judged.items()}
    ours = part[OURS]
    return [
        kind.replace("_", " "),
        band,
        str(len(at)),
        str(ours.n_caught),
        "" if ours.delay_s is None else duration(ours.delay_s),
        str(ours.n_right),
        *(str(part[name].n_caught) for name in rivals),
    ]


def _part(judgement: Judgement, at: Sequence[int]) -> Judgement:
    return Judgement(tuple(judgement.verdicts[i] for i in at))


def method_table(judged: Mapping[str, Judgement], n_sources: int, step_s: float) -> str:
    """Return the methods side by side: caught by size, suspects, delay, false stretches."""
    every = list(judged.values())
    verdicts = every[0].verdicts
    rows = []
    for band in BANDS:
        at = [i for i, v in enumerate(verdicts) if band_of(v.incident) == band]
        unit = "" if band == BANDS[-1] else " spreads"
        counts = [str(_part(judgement, at).n_caught) for judgement in every]
        rows.append([f"caught, {band}{unit} ({len(at)})", *counts])
    delays = ["" if j.delay_s is None else duration(j.delay_s) for j in every]
    quiet_days = every[0].quiet_days
    shares = [j.n_quiet_over * step_s / 864 / max(quiet_days, step_s / 86_400) for j in every]
    rows += [
        [f"caught, all ({len(verdicts)})", *(str(j.n_caught) for j in every)],
        ["caught with the right suspect", *(str(j.n_right) for j in every)],
        ["median delay", *delays],
        [f"false stretches in {quiet_days:.1f} days", *(str(len(j.false)) for j in every)],
        [f"false a day, {n_sources} stations", *(_a_day(j, n_sources) for j in every)],
        ["time over the level, quiet", *(f"{share:.2f} %" for share in shares)],
    ]
    return text_table(["", *judged], rows)


def _a_day(judgement: Judgement, n_sources: int) -> str:
    """Return false stretches a day of the whole fleet, were it always without trouble."""
    if not judgement.quiet_days:
        return ""
    return f"{len(judgement.false) / judgement.quiet_days * n_sources:.1f}"


def where_others_win(judged: Mapping[str, Judgement]) -> list[str]:
    """Return a sentence for each rival: what it caught that ours missed, and the reverse."""
    ours = judged[OURS]
    lines = []
    for name, judgement in judged.items():
        if name == OURS:
            continue
        pairs = list(zip(ours.verdicts, judgement.verdicts, strict=True))
        theirs = [b.incident for a, b in pairs if b.caught and not a.caught]
        n_ours = sum(a.caught and not b.caught for a, b in pairs)
        line = (
            f"{name} caught {len(theirs)} that {OURS} missed{_listed(theirs)}, and missed {n_ours}"
        )
        lines += textwrap.wrap(f"{line} that {OURS} caught.", 100, subsequent_indent="  ")
    return lines


def _listed(incidents: Iterable[Incident]) -> str:
    counted: dict[str, int] = {}
    for incident in incidents:
        words = f"{incident.kind.replace('_', ' ')} {band_of(incident)}"
        counted[words] = counted.get(words, 0) + 1
    listed = ", ".join(f"{n} {words}" if n > 1 else words for words, n in counted.items())
    return f" ({listed})" if listed else ""
