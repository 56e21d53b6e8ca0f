"""Who follows the excess is not to be seen in the levels; and passes are the sweep itself."""

from __future__ import annotations

import pickle
from dataclasses import fields
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from scoring.alert_settings import AlertSettings
from tests.each_alone import ByPost, EachAlone
from tests.streams import NEVER, held
from training.hands import HERE, Here
from training.heldexcess import HeldExcess
from training.levels import Curve, curve_of
from training.passes import DAY_NS, Passes, inside
from training.sweep import Pairs, Sweep

SETTINGS = AlertSettings()
PAIRS = Pairs(
    record=np.array([12.0, 15.0, np.inf]),
    sustained=np.array([6.0, np.inf, 5.0]),
    cap=np.array([30.0, np.inf, 25.0]),
)


def left_out_of(kept: list[HeldExcess]) -> dict[str, Any]:
    """Return two stretches of all sources but the first."""
    times_ns = np.concatenate([times_ns for times_ns, _ in kept[0].chunks()])
    stretches = np.array([[times_ns[0], times_ns[3000]], [times_ns[7000], times_ns[7400]]])
    return {one.source: stretches for one in kept[1:]}


def as_bytes(curve: Curve) -> dict[str, bytes]:
    """Return all that levels and promises are made of, to the last bit."""
    found = {}
    for one in fields(curve):
        value = getattr(curve, one.name)
        found[one.name] = value.tobytes() if isinstance(value, np.ndarray) else pickle.dumps(value)
    return found


@pytest.mark.parametrize("some_left_out", [False, True])
def test_whoever_follows_the_excess_the_curve_is_the_same_to_the_last_bit(
    tmp_path: Path, some_left_out: bool
) -> None:
    curves, usual = [], []
    n_bytes: list[int] = []
    for number, hands in enumerate((HERE, EachAlone(), ByPost(n_bytes))):
        (tmp_path / f"{number}").mkdir()
        kept = held(tmp_path / f"{number}", n=8000, bursts_per_day=2.0)
        left_out = left_out_of(kept) if some_left_out else {}
        curve = curve_of(kept, NEVER, 1.5, SETTINGS, left_out, hands)
        assert curve is not None
        assert (curve.left_share > 0) is some_left_out
        curves.append(as_bytes(curve))
        usual.append([one.usual for one in kept])
    assert curves[0] == curves[1] == curves[2]
    assert usual[0] == usual[1] == usual[2]
    # Names of files travel, not the excess: 8,000 records of 24 bytes, and a sample of them.
    assert 0 < max(n_bytes) < 20_000


def test_passes_find_what_a_sweep_over_all_sources_finds(tmp_path: Path) -> None:
    kept = held(tmp_path, bursts_per_day=4.0)
    passes = Passes(kept, NEVER, SETTINGS)
    _, _, days = passes.rest()
    assert days.tolist() == list(range(days[0], days[0] + 10))
    sweep = Sweep(PAIRS, NEVER, SETTINGS)
    episodes = np.zeros((len(PAIRS), len(days)), dtype=int)
    peaks: list[list[float]] = [[] for _ in range(len(PAIRS))]
    for one in kept:
        for times_ns, excess in one.chunks():
            marks = sweep.add(one.source, one.usual, times_ns, excess)
            for pair, row, raised, peak in zip(
                marks.pair, marks.row, marks.raised, marks.peak, strict=True
            ):
                if raised:
                    episodes[pair, times_ns[row] // DAY_NS - days[0]] += 1
                else:
                    peaks[pair].append(peak)
    for pair, peak in zip(*sweep.still_open(), strict=True):
        peaks[pair].append(peak)
    assert (episodes.sum(axis=1) > 10).all()
    raised = passes.raised(PAIRS, days, {one.source for one in kept})
    assert np.array_equal(raised.by_day, episodes)
    assert np.array_equal(raised.n_over, sweep.n_over)
    assert (raised.n_judged, raised.n_hidden) == (sweep.n_judged, 0)
    assert np.array_equal(passes.episodes(PAIRS), episodes.sum(axis=1))
    assert [found.tolist() for found in passes.peaks(PAIRS)] == peaks


def test_sources_and_stretches_can_be_passed_over(tmp_path: Path) -> None:
    kept = held(tmp_path, bursts_per_day=4.0)
    passes = Passes(kept, NEVER, SETTINGS, Here())
    _, _, days = passes.rest()
    names = {one.source for one in kept}
    every = passes.raised(PAIRS, days, names)
    some = passes.raised(PAIRS, days, {"s1"})
    assert np.array_equal((some + passes.raised(PAIRS, days, names - {"s1"})).by_day, every.by_day)
    none = passes.raised(PAIRS, days, set())
    assert (none.by_day.shape, none.n_judged) == (every.by_day.shape, 0)
    # Of the first day all is passed over, and nothing else is.
    first = np.array([[days[0] * DAY_NS, (days[0] + 1) * DAY_NS - 1]])
    hidden = passes.raised(PAIRS, days, {"s1"}, {"s1": first})
    assert (hidden.by_day[:, 0] == 0).all()
    assert some.by_day[:, 0].any()
    assert (hidden.n_hidden, hidden.n_judged) == (1440, some.n_judged - 1440)


def test_both_ends_of_a_stretch_are_inside() -> None:
    times_ns = np.array([1, 2, 3, 4, 5, 6])
    assert inside(times_ns, np.array([[2, 3], [5, 5]])).tolist() == [
        False, True, True, False, True, False,
    ]  # fmt: skip
    assert not inside(times_ns, None).any()
