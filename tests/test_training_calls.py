"""Streams on disk become alerts: when, how long, and whom the summed scores name."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from scoring.alert_settings import AlertSettings
from tests.streams import NEVER, times_of
from training.calls import calls_by_pair, with_suspects
from training.heldexcess import ExcessFile, HeldExcess
from training.judging import Call
from training.sweep import Pairs

NAMES = ("flow", "power", "room")
N = 400


def a_stream(folder: Path, source: str = "a") -> HeldExcess:
    """Return a stream with two episodes: ten records blaming power, then flow, and one open."""
    excess, suspect = np.zeros(N), np.full(N, -1)
    excess[100:110] = 20.0
    suspect[100:103], suspect[103:110] = 2, 1
    suspect[120] = 0
    excess[390:] = 30.0
    suspect[390:] = 0
    excess[105] = np.nan
    file = ExcessFile(source, folder / source)
    for part in (slice(0, 101), slice(101, 395), slice(395, N)):
        file.add(times_of(N)[part], excess[part], suspect[part])
    return file.kept


def pairs() -> Pairs:
    never = np.full(2, np.inf)
    return Pairs(np.array([25.0, 10.0]), never, never)


def test_each_pair_has_its_own_alerts_and_time(tmp_path: Path) -> None:
    streams = [a_stream(tmp_path), a_stream(tmp_path, "b")]
    found, shares = calls_by_pair(streams, pairs(), NEVER, AlertSettings())
    assert [len(calls) for calls in found] == [2, 4]
    at = times_of(N)
    assert found[1][0].raised_ns == at[100]
    # Cleared by the first record half an hour after the last that was over.
    assert found[1][0].cleared_ns == at[109 + 30]
    # What still stands ends with the records.
    assert found[0][0].cleared_ns == at[-1]
    assert shares[1] == pytest.approx((9 + 10) / (N - 1), rel=1e-6)


def test_suspects_are_named_by_summed_score_at_first_by_the_first_record(
    tmp_path: Path,
) -> None:
    stream = a_stream(tmp_path)
    found, _ = calls_by_pair([stream], pairs(), NEVER, AlertSettings())
    first, last = with_suspects([stream], found[1], NAMES)
    assert (first.at_first, first.suspects) == ("room", ("power", "room"))
    assert (last.at_first, last.suspects) == ("flow", ("flow",))


def test_alerts_of_other_sources_are_left_alone(tmp_path: Path) -> None:
    stream = a_stream(tmp_path)
    assert with_suspects([stream], [Call("z", 0, 1)], NAMES) == []
