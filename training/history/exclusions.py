"""Periods that a site keeps out of learning: a CSV of source, start, end, reason."""

from __future__ import annotations

import csv
from collections.abc import Collection, Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from training.history.files import open_text_bytes
from training.history.options import BadHistory, HistoryOptions
from training.history.tally import NO_OFFSET
from training.history.times import TimeReader
from training.near import near_words

HEADING = ["source", "start", "end", "reason"]


@dataclass(frozen=True, slots=True)
class Exclusion:
    """A period to leave out: from start up to, not including, end.

    source: "" for every source. Times in UTC nanoseconds since 1970. place: file and line, ""
    where it is from no file.
    """

    source: str
    start_ns: int
    end_ns: int
    reason: str
    place: str = field(default="", compare=False)


def load_exclusions(path: Path, options: HistoryOptions) -> tuple[Exclusion, ...]:
    """Return the periods in a file; raises BadHistory for anything that is not one.

    Times are read as those of the history are, in its zone if they have no offset.
    """
    with open_text_bytes(path) as (stream, _):
        try:
            lines = stream.read().decode("utf-8-sig").splitlines()
        except UnicodeDecodeError:
            raise BadHistory(str(path), "is not a CSV file in UTF-8") from None
    rows = list(csv.reader(lines))
    if not rows or [name.strip() for name in rows[0]] != HEADING:
        raise BadHistory(str(path), f"the first line must read {','.join(HEADING)}")
    return tuple(
        _exclusion(f"{path}, line {number}", row, options)
        for number, row in enumerate(rows[1:], start=2)
        if any(cell.strip() for cell in row)
    )


def _exclusion(place: str, row: list[str], options: HistoryOptions) -> Exclusion:
    if len(row) != len(HEADING):
        raise BadHistory(place, f"{len(row)} cells; an exclusion has {len(HEADING)}")
    source, start, end, reason = (cell.strip() for cell in row)
    start_ns, end_ns = (_time(place, text, options) for text in (start, end))
    if not start_ns < end_ns:
        raise BadHistory(place, f"start {start} is not before end {end}")
    return Exclusion(source, start_ns, end_ns, reason, place)


def _time(place: str, text: str, options: HistoryOptions) -> int:
    times, bad = TimeReader(options).read(pa.array([text]), np.zeros(1, dtype=np.int32))
    if bad:
        way = "; add one, or say --zone" if bad[0].reason == NO_OFFSET else ""
        raise BadHistory(place, f"{bad[0].reason}: {text!r}{way}")
    return int(times[0])


def stray_lines(exclusions: Sequence[Exclusion], sources: Collection[str]) -> list[str]:
    """Return a sentence for each line of a file whose source has no record.

    sources: those with a record, left out or not.
    """
    return [
        f"{one.place}: no record has the source {one.source!r}, so this line leaves nothing out"
        f"{near_words(one.source, sorted(sources))}"
        for one in exclusions
        if one.place and one.source and one.source not in sources
    ]


def excluded_by(
    exclusions: Sequence[Exclusion], source: str, times_ns: NDArray[np.int64]
) -> NDArray[np.int64]:
    """Return for each time the number of the first exclusion that holds it, -1 for none."""
    number = np.full(len(times_ns), -1)
    for i, exclusion in enumerate(exclusions):
        if exclusion.source in ("", source):
            held = (times_ns >= exclusion.start_ns) & (times_ns < exclusion.end_ns)
            number[held & (number < 0)] = i
    return number
