"""Work on slices covers everything once and tells what went wrong."""

from __future__ import annotations

import os

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from training import threads
from training.threads import in_slices


def mark(start: int, stop: int, seen: NDArray[np.int64]) -> None:
    """Count each place of a slice."""
    seen[start:stop] += 1


@pytest.mark.parametrize("n_cores", [1, 2, 3])
@given(n=st.integers(0, 50))
def test_every_place_is_in_one_slice(n_cores: int, n: int) -> None:
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(os, "cpu_count", lambda: n_cores)
        seen = np.zeros(n, dtype=np.int64)
        in_slices(n, mark, seen)
    assert (seen == 1).all()


def test_several_cores_share_the_work(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(os, "cpu_count", lambda: 2)
    slices: list[tuple[int, int]] = []
    in_slices(100, lambda start, stop: slices.append((start, stop)))
    assert len(slices) == 2 * threads.SLICES_A_CORE
    assert sorted(slices)[0][0] == 0
    assert sorted(slices)[-1][1] == 100


def test_what_a_slice_raises_is_raised(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(os, "cpu_count", lambda: 2)

    def fail(start: int, stop: int) -> None:
        del stop
        if start:
            raise ValueError(f"slice from {start}")

    with pytest.raises(ValueError, match="slice from"):
        in_slices(10, fail)
