"""Two models on the same readings: density per unit, hidden where only one of them knows."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from scoring.bins import Bins
from scoring.channels import parse_channels
from scoring.model import Levels, Member, Model, Part
from scoring.tree import Tree
from tests.models import a_member, a_model
from tests.pump import SOURCES, pump_model, pump_times, pump_values
from training.judge_density import Floats, as_read_by, compare, shared_instruments

BLOCK_NS = 3600 * 10**9
LEVELS = Levels(10.0, 5.0, 20.0, 900.0, 60.0, 1)


def lone(borders: list[float], shares: list[float], **channel: object) -> Model:
    """Return a model of one channel with given bins."""
    table = parse_channels({"step_s": 60, "channel": [{"name": "flow"} | channel]}, "test")
    words = len(table.instruments[0].words)
    bins = Bins(np.array(borders), words)
    marginal = np.log(np.array(shares))
    tree = Tree(np.zeros((0, 2), dtype=np.int64), np.zeros(0), (marginal,), ())
    like = a_member("", 1, a_model().table)
    usual = replace(like.usual, channel_median=np.zeros(1), channel_spread=np.ones(1))
    member = Member("", (bins,), (Part(tree),), replace(usual, rows=np.zeros((1, 1), np.uint8)))
    return Model(table, {}, member, LEVELS)


def column(*values: float) -> tuple[str, np.ndarray[tuple[int], np.dtype[np.int64]], Floats]:
    return "a", pump_times(len(values)), np.array(values)[:, None]


def test_wide_and_narrow_bins_compare_by_density_per_unit() -> None:
    # The same even density over 0..4 in two bins and in four is the same model.
    coarse = lone([0, 2, 4], [0.05, 0.45, 0.45, 0.05])
    fine = lone([0, 1, 2, 3, 4], [0.05, *[0.225] * 4, 0.05])
    found = compare(coarse, fine, [column(0.5, 1.5, 2.5, 3.5)], BLOCK_NS)
    assert found is not None
    assert found.nats == pytest.approx(0.0, abs=1e-12)
    assert found.new == pytest.approx(-np.log(0.45 / 2))


def test_a_model_that_puts_less_there_is_worse_by_the_ratio_of_densities() -> None:
    old = lone([0, 2, 4], [0.05, 0.45, 0.45, 0.05])
    new = lone([0, 2, 4], [0.05, 0.09, 0.81, 0.05])
    found = compare(new, old, [column(1.0, 1.0, 3.0)], BLOCK_NS)
    assert found is not None
    assert found.nats == pytest.approx((2 * np.log(0.45 / 0.09) + np.log(0.45 / 0.81)) / 3)
    assert found.by_source == {"a": pytest.approx(found.nats)}


def test_readings_that_only_one_knows_are_hidden_and_counted() -> None:
    old = lone([0, 2, 4], [0.05, 0.45, 0.45, 0.05])
    new = lone([0, 2, 4, 9], [0.05, 0.4, 0.4, 0.1, 0.05])
    found = compare(new, old, [column(1.0, 5.0, 20.0, np.nan)], BLOCK_NS)
    assert found is not None
    assert (found.n_readings, found.n_hidden) == (1, 2)
    assert found.nats == pytest.approx(np.log(0.45 / 0.4))
    assert compare(new, old, [column(20.0)], BLOCK_NS) is None


def test_point_values_have_no_density_beyond_the_instruments_resolution() -> None:
    old = lone([0.0, 1e-9, 4], [0.05, 0.45, 0.45, 0.05], resolution=0.1)
    new = lone([0.0, 1e-6, 4], [0.05, 0.45, 0.45, 0.05], resolution=0.1)
    found = compare(new, old, [column(0.0)], BLOCK_NS)
    assert found is not None
    assert found.nats == 0.0


def test_words_are_read_by_their_name() -> None:
    old = lone([], [0.2, 0.7, 0.1], kind="state", words=["off", "on"])
    new = lone([], [0.6, 0.2, 0.1, 0.1], kind="state", words=["on", "off", "idle"])
    found = compare(new, old, [column(0, 1, 2)], BLOCK_NS)
    assert found is not None
    assert (found.n_readings, found.n_hidden) == (2, 1)
    assert found.nats == pytest.approx((np.log(0.7 / 0.6) + np.log(0.2 / 0.2)) / 2)
    assert as_read_by(old, new, np.array([[0.0], [2.0], [np.nan]]))[:2].tolist() == [[1], [2]]


def test_channels_of_one_table_only_or_of_another_kind_are_not_shared() -> None:
    old = lone([0, 2, 4], [0.05, 0.45, 0.45, 0.05])
    other = lone([], [0.5, 0.4, 0.1], kind="state", words=["x", "y"])
    assert shared_instruments(other, old) == []
    assert compare(other, old, [column(0, 1)], BLOCK_NS) is None
    assert np.isnan(as_read_by(old, other, np.zeros((2, 1)))).all()


def test_a_model_is_no_better_than_itself_and_worse_with_members_swapped() -> None:
    model = pump_model()
    records = [(s, pump_times(600, 3000), pump_values(s, 600, 3000)) for s in SOURCES]
    same = compare(model, model, records, BLOCK_NS)
    assert same is not None
    assert (same.nats, same.low, same.high) == (0.0, 0.0, 0.0)
    assert same.n_blocks == 10
    a, b = SOURCES
    swapped = replace(model, members={a: model.members[b], b: model.members[a]})
    worse = compare(swapped, model, records, BLOCK_NS)
    better = compare(model, swapped, records, BLOCK_NS)
    assert worse is not None
    assert better is not None
    assert 0.3 < worse.low < worse.nats < worse.high
    assert better.nats == pytest.approx(-worse.nats)


def test_the_doubt_covers_the_truth_about_as_often_as_it_says() -> None:
    # Differences that hold for a whole block: drawing records would trust them far too much.
    old = lone([0, 2, 4], [0.05, 0.45, 0.45, 0.05])
    new = lone([0, 2, 4], [0.05, 0.35, 0.55, 0.05])
    truth = 0.5 * (np.log(0.45 / 0.35) + np.log(0.45 / 0.55))
    rng = np.random.default_rng(3)
    covered = 0
    for _ in range(60):
        values = np.repeat(rng.choice([1.0, 3.0], 24), 60)
        found = compare(new, old, [("a", pump_times(24 * 60), values[:, None])], BLOCK_NS)
        assert found is not None
        covered += found.low <= truth <= found.high
    assert 50 <= covered <= 60
