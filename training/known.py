"""Known incidents of a site: a CSV of source, start, end, kind, size, channels.

What is written there decides how a model is judged, so nothing of it is guessed: a line
that makes no sense is refused with the line's number and the way out.
"""

from __future__ import annotations

import csv
import itertools
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Final

import numpy as np
import pyarrow as pa

from scoring.errors import OddbranchError
from training.history.files import open_text_bytes
from training.history.options import HistoryOptions
from training.history.tally import NO_OFFSET
from training.history.times import TimeReader
from training.near import near_words

HEADING: Final = ["source", "start", "end", "kind", "size", "channels"]
_BETWEEN_CHANNELS: Final = "|"


class BadIncidents(OddbranchError):
    """A file of incidents that cannot be used; `place` is the file, or file and line."""

    def __init__(self, place: str, what: str) -> None:
        self.place, self.what = place, what
        super().__init__(f"{place}: {what}")


@dataclass(frozen=True, slots=True)
class Known:
    """A known period of trouble at one source.

    start_ns, end_ns: UTC nanoseconds since 1970, the end not included. kind: the site's
    own word. size: in whatever measure the site uses, None where it has none.
    channels: those that are truly concerned, at least one. line: in the file.
    """

    source: str
    start_ns: int
    end_ns: int
    kind: str
    size: float | None
    channels: tuple[str, ...]
    line: int = 0


def load_known(path: Path, options: HistoryOptions, channels: Sequence[str]) -> tuple[Known, ...]:
    """Return the incidents in a file, in order of source and start; raises BadIncidents.

    Times are read as those of the records are. channels: names that there are.
    """
    with open_text_bytes(path) as (stream, _):
        try:
            text = stream.read().decode("utf-8-sig")
        except UnicodeDecodeError:
            raise BadIncidents(str(path), "is not a CSV file in UTF-8") from None
    rows = list(csv.reader(text.splitlines()))
    if not rows or [name.strip() for name in rows[0]] != HEADING:
        raise BadIncidents(str(path), f"the first line must read {','.join(HEADING)}")
    found = [
        _known(f"{path}, line {number}", number, [cell.strip() for cell in row], options, channels)
        for number, row in enumerate(rows[1:], start=2)
        if any(cell.strip() for cell in row)
    ]
    if not found:
        raise BadIncidents(str(path), "a heading and no incident; leave --incidents away")
    found.sort(key=lambda one: (one.source, one.start_ns, one.end_ns))
    _refuse_twice(path, found)
    return tuple(found)


def _known(
    place: str, line: int, row: list[str], options: HistoryOptions, channels: Sequence[str]
) -> Known:
    if len(row) != len(HEADING):
        raise BadIncidents(place, f"{len(row)} cells; an incident has {len(HEADING)}")
    source, start, end, kind, size, named = row
    for name, cell in (("source", source), ("kind", kind), ("channels", named)):
        if not cell:
            raise BadIncidents(place, f"{name} is empty")
    start_ns, end_ns = (_time(place, text, options) for text in (start, end))
    if not start_ns < end_ns:
        raise BadIncidents(place, f"start {start} is not before end {end}")
    concerned = tuple(name.strip() for name in named.split(_BETWEEN_CHANNELS))
    for name in concerned:
        if name not in channels:
            raise BadIncidents(
                place, f"channel {name!r} is not in the model{near_words(name, channels)}"
            )
    return Known(source, start_ns, end_ns, kind, _size(place, size), concerned, line)


def _size(place: str, text: str) -> float | None:
    if not text:
        return None
    try:
        size = float(text)
    except ValueError:
        raise BadIncidents(
            place, f"size {text!r} is no number; leave it empty if unknown"
        ) from None
    if not 0 < size < math.inf:
        raise BadIncidents(place, f"size {text} is not above 0 and finite")
    return size


def _time(place: str, text: str, options: HistoryOptions) -> int:
    times, bad = TimeReader(options).read(pa.array([text]), np.zeros(1, dtype=np.int32))
    if bad:
        way = "; add one, or say --zone" if bad[0].reason == NO_OFFSET else ""
        raise BadIncidents(place, f"{bad[0].reason}: {text!r}{way}")
    return int(times[0])


def _refuse_twice(path: Path, found: Sequence[Known]) -> None:
    for before, after in itertools.pairwise(found):
        if replace(before, line=0) == replace(after, line=0):
            raise BadIncidents(
                f"{path}, line {after.line}", f"is the incident of line {before.line} once more"
            )


def refuse_unknown_sources(path: Path, known: Sequence[Known], sources: Sequence[str]) -> None:
    """Raise BadIncidents for an incident at a source of which there is no record."""
    for one in known:
        if one.source not in sources:
            raise BadIncidents(
                f"{path}, line {one.line}",
                f"source {one.source!r} has no record here{near_words(one.source, sources)}",
            )
