"""`oddbranch score`: a row of scores for every row of records, in the same order."""

from __future__ import annotations

import csv
import math
import time
from collections import Counter
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, TextIO

import click
import numpy as np

from scoring.artefact import read_model
from scoring.scorer import ALERT_WORDS, Scorer, Scores
from scoring.standing import Standing
from training.history.batch import HistoryBatch
from training.history.files import history_n_bytes
from training.history.flags import history_flags, history_options
from training.history.options import BadHistory
from training.history.reading import read_history
from training.history.tally import Tally
from training.history.times import NO_TIME
from training.progress import Progress

COLUMNS = (
    "time", "source", "surprise", "sustained", "suspect", "expected_low", "expected_high",
    "alert", "excess", "missing", "problem",
)  # fmt: skip


class _Writer:
    """Scores batches and writes their rows; keeps a standing per source."""

    def __init__(self, scorer: Scorer, file: TextIO) -> None:
        self._scorer = scorer
        self._out = csv.writer(file, lineterminator="\n")
        self._out.writerow(COLUMNS)
        self._standings: dict[str, Standing] = {}
        self.alerts: Counter[str] = Counter()
        self.unknown: set[str] = set()
        self.n_rows = 0

    def add(self, batch: HistoryBatch) -> None:
        """Score and write one batch in its own order."""
        sources = batch.sources
        rows: list[list[str]] = [[]] * batch.n_rows
        times = batch.time_text or ["" if t == NO_TIME else _text(t) for t in batch.times_ns]
        good = np.flatnonzero(batch.good)
        codes = batch.source_codes[good]
        for code in np.unique(codes).tolist():
            where = good[codes == code]
            source = batch.source_names[code]
            if source not in self._scorer.model.members:
                self.unknown.add(source)
            scores, self._standings[source] = self._scorer.score(
                source, batch.times_ns[where], batch.values[where], self._standings.get(source)
            )
            for k, r in enumerate(where.tolist()):
                rows[r] = [times[r], source, *_cells(scores, k, self._scorer)]
            for word in scores.alert:
                self.alerts[ALERT_WORDS[word]] += 1
        for r in np.flatnonzero(~batch.good).tolist():
            rows[r] = [times[r], sources[r], *[""] * 8, str(batch.problem[r])]
        self._out.writerows(rows)
        self.n_rows += batch.n_rows


def _text(time_ns: int) -> str:
    return datetime.fromtimestamp(int(time_ns) / 1e9, UTC).isoformat().replace("+00:00", "Z")


def _number(x: float, digits: int = 4) -> str:
    return f"{x:.{digits}f}" if math.isfinite(x) else ""


def _reading(x: float) -> str:
    return f"{x:.7g}" if math.isfinite(x) else ""


def _cells(scores: Scores, k: int, scorer: Scorer) -> list[str]:
    suspect = int(scores.suspect[k])
    judged = bool(scores.judged[k])
    return [
        _number(scores.surprise[k]),
        _number(scores.sustained[k]),
        scorer.instruments[suspect].name if suspect >= 0 else "",
        _reading(scores.expected_low[k]),
        _reading(scores.expected_high[k]),
        ALERT_WORDS[scores.alert[k]],
        _number(scores.excess[k]),
        str(int(scores.missing[k])),
        "late" if scores.late[k] else ("" if judged else "too few readings to judge"),
    ]


def _opened(path: Path) -> TextIO:
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        return path.open("w", encoding="utf-8", newline="")
    except OSError as error:
        raise BadHistory(str(path), f"cannot be written: {error.strerror}") from None


@click.command("score")
@click.argument("records", nargs=-1, required=True, metavar="RECORDS...")
@click.option(
    "--model",
    required=True,
    type=click.Path(path_type=Path),
    metavar="MODEL",
    help="Model directory.",
)
@click.option(
    "--out",
    required=True,
    type=click.Path(path_type=Path),
    metavar="SCORES.csv",
    help="Where to write a row of scores for every row.",
)
@history_flags
def score_command(records: tuple[str, ...], model: Path, out: Path, **flags: Any) -> None:
    """Score RECORDS under a model: one row out for every row in, in order."""
    began = time.perf_counter()
    scorer = Scorer(read_model(model))
    options = history_options(**flags, keep_time_text=True)
    with (
        Tally(None) as tally,
        Progress("scoring", history_n_bytes(records)) as progress,
        _opened(out) as file,
    ):
        writer = _Writer(scorer, file)
        for batch in read_history(
            records, scorer.model.table, options, tally, progress, every_channel=False
        ):
            writer.add(batch)
        tally.refuse_if_mostly_bad(str(records[0]))
    n_bad = sum(tally.rejected.values())
    click.echo(
        f"{writer.n_rows} rows scored under model {scorer.model.name}, {n_bad} refused, "
        f"{writer.alerts['record']} over the record level, "
        f"{writer.alerts['sustained']} over the sustained level, "
        f"{time.perf_counter() - began:.1f} s"
    )
    for reason, n in tally.rejected.most_common():
        click.echo(f"  refused: {n} {reason} (first: {tally.first[reason]})")
    if writer.unknown:
        names = ", ".join(sorted(writer.unknown)[:5])
        click.echo(f"  scored by the fleet's member, not seen in learning: {names}")
