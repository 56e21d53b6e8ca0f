"""Learns in a process of its own and prints its seconds and peak memory.

Arguments: what (`files` or `wide`) and its own. `files MODEL HISTORY CHANNELS` runs the
command; `wide N_CHANNELS N_RECORDS` learns from records made as they are spooled.
"""

from __future__ import annotations

import resource
import sys
import tempfile
import time
from pathlib import Path

import click
import numpy as np
from click.testing import CliRunner

from tests.spools import START_NS, measurements
from training.history.batch import HistoryBatch
from training.history.spool import Spool
from training.history.tally import Tally
from training.learn import learn_command, learn_model
from training.settings import LearnSettings

N_BATCH = 5000
GAP_SHARE = 0.001


def learn_files(model: str, history: str, channels: str) -> None:
    """Run the command."""
    words = [history, "--channels", channels, "--out", model]
    result = CliRunner().invoke(learn_command, words, catch_exceptions=False)
    assert result.exit_code == 0, result.output


def learn_wide(n_channels: int, n_records: int) -> None:
    """Learn from a tree of channels, each with up to four neighbours, made batch by batch."""
    rng = np.random.default_rng(5)
    parents = [(k - 1) // 3 for k in range(1, n_channels)]
    with tempfile.TemporaryDirectory() as folder, Spool(n_channels, Path(folder)) as spool:
        tally = Tally()
        for first in range(0, n_records, N_BATCH):
            n = min(N_BATCH, n_records - first)
            values = rng.normal(size=(n, n_channels))
            for child, parent in enumerate(parents, 1):
                values[:, child] = 0.8 * values[:, parent] + 0.6 * values[:, child]
            # Gaps that come one by one: nearly every record with one has a mask of its own.
            values[rng.random(values.shape) < GAP_SHARE] = np.nan
            at = START_NS + (first + np.arange(n)) * 60 * 1_000_000_000
            spool.add(
                HistoryBatch(
                    Path("history.csv"),
                    np.arange(first, first + n),
                    at.astype(np.int64),
                    np.zeros(n, np.int32),
                    ("a",),
                    values,
                    np.full(n, "", dtype=object),
                ),
                (),
                tally,
            )
        spool.finish(tally)
        result = learn_model(spool, measurements(n_channels), LearnSettings())
    found = {tuple(e) for e in result.model.members["a"].parts[0].tree.edges.tolist()}
    wanted = {(parent, child) for child, parent in enumerate(parents, 1)}
    click.echo(f"{len(found & wanted)} of {len(wanted)} edges found")


if __name__ == "__main__":
    began = time.perf_counter()
    if sys.argv[1] == "files":
        learn_files(*sys.argv[2:])
    else:
        learn_wide(int(sys.argv[2]), int(sys.argv[3]))
    peak_kb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    click.echo(f"{time.perf_counter() - began:.2f} {peak_kb / 1024:.0f}")
