"""What learning reads: derived channels, folds, samples, stretches left out."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pytest

from scoring.derived import derive
from tests.spools import START_NS, measurements, spool_of, times
from training.blocks import N_FOLDS
from training.history.spool import Spool
from training.rows import MAX_SAMPLE, Rows

S = 1_000_000_000
TABLE = measurements(2, derived=[{"name": "before", "operation": "previous", "of": ["c0"]}])


@pytest.fixture(scope="module")
def spool() -> Iterator[Spool]:
    """Yield two sources; the long one is longer than one chunk and than a sample."""
    rng = np.random.default_rng(1)
    with spool_of({"long": rng.normal(size=(70_000, 2)), "short": rng.normal(size=(50, 2))}) as s:
        yield s


@pytest.fixture(scope="module")
def rows(spool: Spool) -> Rows:
    """Return the rows of both sources."""
    return Rows(spool, TABLE, ("long", "short"), 60.0)


def test_chunks_have_derived_channels_as_online(rows: Rows, spool: Spool) -> None:
    chunks = list(rows.of("long").chunks())
    assert len(chunks) > 1
    values = np.concatenate([c.values for c in chunks])
    at = np.concatenate([c.times_ns for c in chunks])
    plain = np.concatenate([v for _, v in spool.chunks("long")])
    wanted, _ = derive(TABLE, at, plain, None)
    np.testing.assert_array_equal(values, wanted)
    np.testing.assert_array_equal(values[1:, 2], plain[:-1, 0])


def test_sources_come_one_after_the_other_and_look_back_no_further(rows: Rows) -> None:
    chunks = list(rows.chunks())
    assert [c.source for c in chunks[-2:]] == ["long", "short"]
    assert np.isnan(chunks[-1].values[0, 2])
    assert rows.n_records == 70_050
    assert rows.of("short").n_records == 50


def test_a_sample_is_of_its_folds_alone_and_bounded(rows: Rows) -> None:
    known = np.concatenate([c.values[c.fold == 2] for c in rows.of("long").chunks()])
    sample, _ = rows.of("long").sample((2,))
    assert np.isin(sample[:, 1], known[:, 1]).all()
    everything, _ = rows.sample(tuple(range(N_FOLDS)))
    assert 0.9 * MAX_SAMPLE < len(everything) < 1.1 * MAX_SAMPLE
    assert len(rows.of("short").sample(tuple(range(N_FOLDS)))[0]) == 50


def test_a_sample_says_which_block_of_time_each_record_is_from(rows: Rows) -> None:
    _, blocks = rows.of("short").sample(tuple(range(N_FOLDS)))
    np.testing.assert_array_equal(blocks, rows.blocks("short").number(times(50)))
    _, both = rows.sample((0,))
    long, short = (set(rows.of(s).sample((0,))[1].tolist()) for s in ("long", "short"))
    assert len(set(both.tolist())) == len(long) + len(short)


def test_a_sample_depends_on_times_alone(rows: Rows) -> None:
    rng = np.random.default_rng(1)
    with spool_of({"long": rng.normal(size=(70_000, 2))}) as again:
        other = Rows(again, TABLE, ("long",), 60.0).sample((0, 1))
    np.testing.assert_array_equal(rows.of("long").sample((0, 1))[0], other[0])


def test_stretches_left_out_are_marked_and_not_sampled(spool: Spool) -> None:
    first, last = START_NS + 10 * 60 * S, START_NS + 20 * 60 * S
    rows = Rows(spool, TABLE, ("short",), 60.0, {"short": np.array([[first, last]])})
    (chunk,) = rows.chunks()
    assert np.flatnonzero(~chunk.kept).tolist() == list(range(10, 21))
    assert len(rows.sample(tuple(range(N_FOLDS)))[0]) == 39
    # Left out of the tables, never of the levels: the records themselves still come.
    assert len(chunk.times_ns) == 50


def test_folds_are_those_of_the_source_s_blocks(rows: Rows) -> None:
    blocks = rows.blocks("short")
    (chunk,) = rows.of("short").chunks()
    np.testing.assert_array_equal(chunk.fold, blocks.fold(times(50)))
    np.testing.assert_array_equal(chunk.clear, blocks.clear(times(50)))
