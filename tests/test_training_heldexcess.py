"""Held-out excess comes back from disk as it went there, with a fair sample."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from tests.streams import noise, times_of
from training.heldexcess import keep_excess


def test_what_was_kept_comes_back_in_order(tmp_path: Path) -> None:
    times_ns, excess = times_of(150_000), noise(150_000, 1)
    excess[::7] = np.nan
    parts = [slice(i, i + 40_000) for i in range(0, 150_000, 40_000)]
    kept = keep_excess("a", 150_000, ((times_ns[p], excess[p]) for p in parts), tmp_path / "a")
    found = list(kept.chunks())
    assert len(found) > 1
    assert np.array_equal(np.concatenate([t for t, _ in found]), times_ns)
    assert np.array_equal(np.concatenate([x for _, x in found]), excess, equal_nan=True)
    assert kept.n_records == 150_000
    assert kept.n_judged == (~np.isnan(excess)).sum()
    assert kept.highest == np.nanmax(excess)


def test_the_sample_is_even_and_bounded(tmp_path: Path) -> None:
    n = 200_000
    rising = np.arange(n, dtype=np.float64)
    parts = [slice(i, i + 33_333) for i in range(0, n, 33_333)]
    kept = keep_excess("a", n, ((times_of(n)[p], rising[p]) for p in parts), tmp_path / "a")
    steps = np.diff(kept.sample)
    assert 10_000 <= len(kept.sample) <= 25_000
    assert steps.min() == steps.max()


def test_a_source_without_a_judged_record_is_known_as_such(tmp_path: Path) -> None:
    kept = keep_excess("a", 3, [(times_of(3), np.full(3, np.nan))], tmp_path / "a")
    assert (kept.n_judged, kept.highest, len(kept.sample)) == (0, -np.inf, 0)
