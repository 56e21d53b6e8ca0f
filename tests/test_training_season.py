"""What moves more slowly than the history is long is named, what repeats daily is not."""

from __future__ import annotations

import pickle
from pathlib import Path

import numpy as np
import pytest

from scoring.channels import ChannelTable, parse_channels
from tests.each_alone import ByPost
from tests.learned import small_fleet
from tests.spools import spool_of
from training.rows import Rows
from training.season import slow_channels, unseen_nats

N = 20 * 1440
MINUTES = np.arange(N)
DAILY = 20.0 + 8.0 * np.sin(2 * np.pi * MINUTES / 1440)
SLOW = 12.0 + 3.0 * np.sin(2 * np.pi * MINUTES / (25 * 1440))
STEP = (MINUTES > N // 2).astype(float)


def a_table() -> ChannelTable:
    channels = [
        {"name": "daily", "unit": "kW"},
        {"name": "slow", "unit": "degC"},
        {"name": "mode", "kind": "state", "words": ["a", "b"]},
        {"name": "silent"},
    ]
    return parse_channels({"step_s": 60.0, "channel": channels}, "test")


def records(seed: int) -> np.ndarray[tuple[int, int], np.dtype[np.float64]]:
    rng = np.random.default_rng(seed)
    noisy = 0.5 * rng.standard_normal((N, 2))
    return np.column_stack([DAILY + noisy[:, 0], SLOW + noisy[:, 1], STEP, np.full(N, np.nan)])


def test_the_slow_channel_is_named_with_what_was_seen(tmp_path: Path) -> None:
    with spool_of({"a": records(1), "b": records(2)}, folder=tmp_path) as spool:
        found = slow_channels(Rows(spool, a_table(), spool.sources, 60.0))
    # The state changed once and the silent channel never came: neither is a season.
    assert [(one.name, one.unit) for one in found] == [("slow", "degC")]
    assert found[0].slow_share > 0.8
    assert found[0].low == pytest.approx(SLOW.min(), abs=3.0)
    assert found[0].high == pytest.approx(SLOW.max(), abs=3.0)


def test_a_channel_slow_at_one_source_of_three_is_no_season(tmp_path: Path) -> None:
    steady = records(1)
    steady[:, 1] = steady[:, 0]
    with spool_of({"a": records(1), "b": steady, "c": steady}, folder=tmp_path) as spool:
        assert slow_channels(Rows(spool, a_table(), spool.sources, 60.0)) == ()


def test_the_share_is_that_of_the_parts_means(tmp_path: Path) -> None:
    table = parse_channels({"step_s": 60.0, "channel": [{"name": "x"}]}, "test")
    # Tenths with means 1 and 11 in turn: 25 between, 1 within.
    values = np.concatenate([np.tile([0.0, 2.0], 50) + 10.0 * (k % 2) for k in range(10)])
    with spool_of({"a": values[:, None]}, folder=tmp_path) as spool:
        found = slow_channels(Rows(spool, table, spool.sources, 60.0))
    assert found[0].slow_share == pytest.approx(25 / 26)
    assert (found[0].low, found[0].high) == (0.0, 12.0)


@pytest.mark.parametrize("values", [np.arange(50.0), np.full(2000, 3.0), np.full(2000, np.nan)])
def test_too_little_to_tell_is_no_season(
    tmp_path: Path, values: np.ndarray[tuple[int], np.dtype[np.float64]]
) -> None:
    table = parse_channels({"step_s": 60.0, "channel": [{"name": "x"}]}, "test")
    with spool_of({"a": values[:, None]}, folder=tmp_path) as spool:
        assert slow_channels(Rows(spool, table, spool.sources, 60.0)) == ()


def test_what_members_carry_is_scored_by_others_who_keep_the_tables_layout() -> None:
    result = small_fleet()[0]
    held_out = {source: one.held_out for source, one in result.learned.items()}
    # As they come from another process: without the layout that scoring makes.
    members = {s: pickle.loads(pickle.dumps(one.member)) for s, one in result.learned.items()}
    found = unseen_nats(members, held_out, ByPost([]))
    trees = [part.tree for member in members.values() for part in member.parts]
    assert not any("arrays" in vars(tree) for tree in trees)
    assert found == unseen_nats(members, held_out) > 0.0
    assert all("arrays" in vars(tree) for tree in trees)
    assert unseen_nats({}, {}) == 0.0
