"""`oddbranch survey`: read a history without a channel table, and propose one."""

from __future__ import annotations

import math
import re
from collections import Counter
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from time import perf_counter
from typing import Any

import click
import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from training.channel_facts import MAX_WORDS, ColumnFacts
from training.channel_toml import ProposedChannel, text_table, write_channels
from training.history.batch import SourceRegister
from training.history.cells import CellFile
from training.history.files import find_files, history_n_bytes
from training.history.flags import history_flags, history_options
from training.history.long_cells import LongCells, is_long
from training.history.options import ONLY_SOURCE, BadHistory, HistoryOptions
from training.history.reading import (
    Advances,
    open_cells,
    refuse_local_times,
    refuse_missing_columns,
)
from training.history.tally import NO_SOURCE, WRONG_CELLS, Tally
from training.history.times import NO_TIME, NS_PER_S, TimeReader
from training.history.wide import Problems, number_reader
from training.progress import Progress

# Different intervals between records that are counted; jitter makes more, but the usual
# one is among the first.
MAX_INTERVALS = 50_000

# `Flow [m3/h]` and `Flow (bar)`: a unit in brackets at the end, with a letter, % or degree.
_UNIT = re.compile(r"[\[(]\s*([^\[\]()]*[^\W\d_%°][^\[\]()]*|[%°])\s*[\])]\s*$")


@dataclass(slots=True)
class Survey:
    """What a history holds, by column, and how its records follow each other.

    columns: by name, in order of appearance. sources: names. n_twice: rows whose source
    had their time already in the row before. intervals_ms: how often records of a source
    were so many milliseconds apart.
    """

    columns: dict[str, ColumnFacts] = field(default_factory=dict)
    sources: SourceRegister = field(default_factory=SourceRegister)
    intervals_ms: Counter[int] = field(default_factory=Counter)
    n_twice: int = 0
    first_ns: int | None = None
    last_ns: int | None = None
    is_long: bool = False

    def facts(self, name: str) -> ColumnFacts:
        """Return the facts of one column, begun now if it is new."""
        return self.columns.setdefault(name, ColumnFacts(name))

    def add_times(self, times_ns: NDArray[np.int64], keys: NDArray[np.int64]) -> None:
        """Take in times; those with the same key follow each other."""
        there = times_ns != NO_TIME
        if not there.any():
            return
        times, keys = times_ns[there], keys[there]
        low, high = int(times.min()), int(times.max())
        self.first_ns = low if self.first_ns is None else min(self.first_ns, low)
        self.last_ns = high if self.last_ns is None else max(self.last_ns, high)
        order = np.argsort(keys, kind="stable")
        between = np.diff(times[order])[np.diff(keys[order]) == 0]
        self.n_twice += int(np.count_nonzero(between == 0))
        between_ms = np.round(between[between > 0] / 1e6).astype(np.int64)
        for ms, n in zip(*np.unique(between_ms, return_counts=True), strict=True):
            if len(self.intervals_ms) < MAX_INTERVALS or int(ms) in self.intervals_ms:
                self.intervals_ms[int(ms)] += int(n)

    @property
    def step_s(self) -> float | None:
        """The median time between two records of one source; None with fewer than two."""
        half = sum(self.intervals_ms.values()) / 2
        n = 0
        for ms, count in sorted(self.intervals_ms.items()):
            n += count
            if n >= half and ms:
                return ms / 1000
        return None


def survey_history(
    paths: Iterable[Path | str],
    options: HistoryOptions,
    tally: Tally,
    progress: Advances | None = None,
) -> Survey:
    """Return what a history holds; reads every file once, in batches.

    Raises BadHistory for files that are no history, and when most rows are bad.
    """
    survey = Survey()
    files = find_files(paths)
    for path in files:
        file = open_cells(path, options)
        refuse_missing_columns(file, options)
        if is_long(file, options, None):
            survey.is_long = True
            steps = _survey_long(file, options, survey, tally)
        else:
            steps = _survey_wide(file, options, survey, tally)
        for n_bytes in steps:
            if progress is not None:
                progress.advance(n_bytes)
    place = str(files[0]) if len(files) == 1 else f"{files[0]} and {len(files) - 1} more"
    if not tally.n_rows:
        raise BadHistory(place, "has a heading and no rows")
    tally.refuse_if_mostly_bad(place)
    return survey


def _survey_wide(
    file: CellFile, options: HistoryOptions, survey: Survey, tally: Tally
) -> Iterator[int]:
    numbers, times = number_reader(file, options), TimeReader(options)
    names = [name for name in file.names if name not in (options.time, options.source)]
    for i, cells in enumerate(file.batches(file.names)):
        n = len(cells.lines)
        tally.n_rows += n
        problems = Problems(cells, tally, np.full(n, "", dtype=object))
        for row, met in cells.n_cells_met.items():
            problems.add(row, WRONG_CELLS, f"{met} cells, the heading has {cells.n_cells}")
        if options.source in cells.columns:
            codes = survey.sources.codes(cells.columns[options.source])
        else:
            codes = np.full(n, survey.sources.code(ONLY_SOURCE), dtype=np.int32)
        for row in np.flatnonzero(codes < 0).tolist():
            problems.add(row, NO_SOURCE, f"column {options.source!r} is empty")
        times_ns, bad_times = times.read(cells.columns[options.time], codes)
        for bad in bad_times:
            problems.add(*bad)
        if i == 0:
            refuse_local_times(problems.reason, str(file.path))
        good = problems.reason == ""
        whole = bool(good.all())
        survey.add_times(times_ns[good], codes[good].astype(np.int64))
        for name in names:
            column = cells.columns[name]
            column = column if whole else column.filter(pa.array(good))
            survey.facts(name).add(column, numbers, codes[good])
        yield cells.n_bytes


def _survey_long(
    file: CellFile, options: HistoryOptions, survey: Survey, tally: Tally
) -> Iterator[int]:
    numbers = number_reader(file, options)
    reader = LongCells(file, options, survey.sources, tally)
    for i, cells in enumerate(file.batches(reader.columns)):
        readings, problems = reader.read(cells)
        if i == 0:
            refuse_local_times(problems.reason, str(file.path))
        keys = readings.source_codes.astype(np.int64) * len(readings.names)
        survey.add_times(readings.times_ns, keys + readings.channel_codes)
        for code, name in enumerate(readings.names):
            mine = readings.channel_codes == code
            column: Any = readings.values.filter(pa.array(mine))
            survey.facts(name).add(column, numbers, readings.source_codes[mine])
        yield cells.n_bytes


def propose(facts: ColumnFacts) -> ProposedChannel:
    """Return what to propose for one column."""
    name = facts.name

    def left_out(why: str) -> ProposedChannel:
        return ProposedChannel(name, (f"left out: {why}",), leave_out=True)

    if facts.unreadable:
        return left_out(f"no numbers and no words ({facts.unreadable})")
    if not facts.n_filled:
        return left_out("never filled")
    if facts.is_text and len(facts.words) > MAX_WORDS:
        return left_out(f"text, more than {MAX_WORDS} different ones")
    if facts.is_text and 2 * facts.n_filled < facts.n_cells:
        share = _percent(facts.n_filled, facts.n_cells)
        return left_out(f"text in {share} of the rows, remarks rather than a state")
    if not facts.is_text and not math.isfinite(facts.low):
        return left_out("no usable number")
    if facts.counts_rows:
        return left_out("counts rows: every reading is one and the same step above the last")
    comments = [_seen(facts)]
    if facts.is_text or facts.is_few_integers:
        if facts.is_text:
            words = tuple(sorted(facts.words))
        else:
            values = np.unique(np.concatenate(list(facts.values.values())))
            words = tuple(str(int(value)) for value in values)
            comments.append("a state because it holds few whole numbers and changes seldom")
        return ProposedChannel(name, tuple(comments), unit_in(name), words)
    if facts.n_text:
        met = ", ".join(repr(word) for word in list(facts.words)[:5])
        comments.append(f"{facts.n_text} readings are text ({met}); such rows are not used")
    return ProposedChannel(
        name,
        tuple(comments),
        unit_in(name),
        resolution=facts.resolution(),
        maybe_span=round_span(facts.low, facts.high),
    )


def _seen(facts: ColumnFacts) -> str:
    parts = []
    if not facts.is_text:
        parts.append(f"seen {facts.low:.6g} to {facts.high:.6g}")
    at_least = "" if facts.is_text or facts.n_values < 4096 else "at least "
    parts.append(f"{at_least}{facts.n_values} different values")
    parts.append(f"{_percent(facts.n_missing, facts.n_cells)} missing")
    parts.append(f"{100 * facts.same_share:.0f} % as the reading before")
    return ", ".join(parts)


def _percent(n: int, of: int) -> str:
    share = 100 * n / of if of else 0.0
    return f"{share:.0f} %" if share in (0, 100) else f"{share:.2g} %"


def unit_in(name: str) -> str:
    """Return the unit that stands in brackets at the end of a column's name, or ""."""
    met = _UNIT.search(name)
    return met[1].strip() if met else ""


def round_span(low: float, high: float) -> tuple[float, float] | None:
    """Return a span with half the seen range to spare on both sides, in round numbers.

    A reading that was never below zero is not proposed to be. None for a constant.
    """
    room = (high - low) / 2
    if not room > 0 or not math.isfinite(2 * room):
        return None
    scale = 10.0 ** math.floor(math.log10(high - low))
    bottom = math.floor((low - room) / scale) * scale
    top = math.ceil((high + room) / scale) * scale
    bottom = max(bottom, 0.0) if low >= 0 else bottom
    return float(f"{bottom:.12g}"), float(f"{top:.12g}")


def describe(survey: Survey, proposals: list[ProposedChannel], tally: Tally) -> str:
    """Return what a person wants to know of a survey, as text."""
    names = survey.sources.names
    shown = ", ".join(names[:8]) + (f" and {len(names) - 8} more" if len(names) > 8 else "")
    unit = "readings" if survey.is_long else "records"
    lines = [f"{unit:12s}{tally.n_rows}"]
    lines += [
        f"  not used  {n} for {reason!r}; the first: {tally.first[reason]}"
        for reason, n in tally.rejected.most_common()
    ]
    lines.append(f"{'sources':12s}{len(names)}: {shown}")
    if survey.first_ns is not None and survey.last_ns is not None:
        lines.append(f"{'time':12s}{_stamp(survey.first_ns)} to {_stamp(survey.last_ns)}")
    if survey.step_s is not None:
        lines.append(f"{'step':12s}{survey.step_s:g} s")
    if 10 * survey.n_twice > tally.n_rows:
        lines.append(
            f"            {survey.n_twice} {unit} have the time of the one before them: is there "
            "a column that tells sources apart? Name it with --source NAME"
        )
    rows = [_table_row(survey.columns[p.name], p) for p in proposals]
    heading = ["channel", "kind", "unit", "from", "to", "resolution", "values", "missing", "same"]
    return "\n".join([*lines, "", text_table(heading, rows, left=3)])


def _table_row(facts: ColumnFacts, proposal: ProposedChannel) -> list[str]:
    if proposal.leave_out:
        return [facts.name, "left out", "", "", "", "", "", "", ""]
    number = not facts.is_text
    return [
        facts.name,
        proposal.kind,
        proposal.unit,
        f"{facts.low:.6g}" if number else "",
        f"{facts.high:.6g}" if number else "",
        "" if proposal.resolution is None else f"{proposal.resolution:g}",
        str(facts.n_values),
        _percent(facts.n_missing, facts.n_cells),
        f"{100 * facts.same_share:.0f} %",
    ]


def _stamp(time_ns: int) -> str:
    stamp = datetime.fromtimestamp(time_ns / NS_PER_S, UTC)
    return stamp.strftime("%Y-%m-%dT%H:%M:%SZ")


@click.command()
@click.argument("history", nargs=-1, required=True, metavar="HISTORY...")
@click.option(
    "--out",
    required=True,
    type=click.Path(dir_okay=False, path_type=Path),
    metavar="CHANNELS.toml",
    help="Where to write the channel table.",
)
@history_flags
def survey_command(history: tuple[str, ...], out: Path, **flags: Any) -> None:
    """Read HISTORY (CSV or Parquet files, folders, patterns) and propose a channel table.

    The table is commented TOML for you to edit. A table that is there already is kept
    beside the new one with .old at its end.
    """
    start_s = perf_counter()
    options = history_options(**flags)
    total = history_n_bytes(history)
    with Tally() as tally, Progress("surveying", total) as progress:
        survey = survey_history(history, options, tally, progress)
    proposals = [propose(facts) for facts in survey.columns.values()]
    if all(p.leave_out for p in proposals):
        raise BadHistory(history[0], "no column holds numbers or states that could be watched")
    text = write_channels(proposals, survey.step_s)
    kept = keep_old(out, text)
    out.write_text(text, encoding="utf-8")
    click.echo(describe(survey, proposals, tally))
    click.echo()
    if kept is not None:
        click.echo(f"kept the table that was there as {kept}")
    n_watched = sum(not p.leave_out for p in proposals)
    click.echo(f"wrote {out} with {n_watched} channels, in {perf_counter() - start_s:.1f} s")


def keep_old(out: Path, text: str) -> Path | None:
    """Move a file that says something else out of the way; return where it went."""
    if not out.is_file() or out.read_bytes() == text.encode():
        return None
    kept = out.with_name(out.name + ".old")
    out.replace(kept)
    return kept
