"""Bins of every kind of channel: what is normal, what lies beyond, what lies between."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from scoring.bins import MAX_BINS, BinTable
from scoring.channels import Channel
from tests.strategies import SEEDS
from training.binning import LADDER, NodeBins, choose_bins, coarsen, unseen_ends
from training.choices import N_BINS

Floats = NDArray[np.float64]


def a_sample(kind: str, n: int, seed: int) -> Floats:
    """Return n readings of a channel of some kind."""
    rng = np.random.default_rng(seed)
    x = rng.normal(size=n)
    if kind == "normal":
        return x
    if kind == "heavy-tailed":
        return np.asarray(rng.standard_t(2, n))
    if kind == "skewed":
        return np.exp(1.5 * x)
    if kind == "bimodal":
        return np.where(rng.random(n) < 0.6, x, 100 + 3 * x)
    if kind == "clamped":
        return np.clip(50 + 40 * x, 0, 100)
    if kind == "quantised":
        return np.round(20 + 2 * x) / 2
    if kind == "constant":
        return np.full(n, 7.5)
    if kind == "nearly constant":
        return np.where(rng.random(n) < 0.01, 7.5 + 0.1 * np.abs(x), 7.5)
    if kind == "on and off":
        return (rng.random(n) < 0.3).astype(np.float64)
    if kind == "far from nought":
        return np.asarray(1e9 + 0.01 * x)
    if kind == "tiny":
        return np.asarray(1e-12 * x)
    assert kind == "one reading"
    return x[:1]


KINDS = (
    *("normal", "heavy-tailed", "skewed", "bimodal", "clamped", "quantised", "constant"),
    *("nearly constant", "on and off", "far from nought", "tiny", "one reading"),
)
MEASURED = Channel(name="c")


def surprise(node: NodeBins, readings: Floats) -> Floats:
    """Return -ln p(bin) of readings by the channel's marginal alone."""
    rows = BinTable.of((node.bins,)).rows(np.asarray(readings, dtype=float)[:, None])
    return np.asarray(-np.log(node.marginal[rows[:, 0]]))


def bins_at(node: NodeBins, readings: Floats) -> set[int]:
    """Return the bins that readings fall in."""
    rows = BinTable.of((node.bins,)).rows(np.asarray(readings, dtype=float)[:, None])
    return set(rows[:, 0].tolist())


def spread_of(sample: Floats) -> float:
    """Return a step that is small for the channel."""
    low, high = np.quantile(sample, [0.16, 0.84])
    return float(max((high - low) / 2, (sample.max() - sample.min()) / 20, 1e-3 * abs(high), 1e-13))


@pytest.mark.parametrize("n", [30, 500, 20_000])
@pytest.mark.parametrize("kind", KINDS)
def test_borders_and_scores_rise_and_probabilities_are_positive(kind: str, n: int) -> None:
    node = choose_bins(a_sample(kind, n, 1), MEASURED)
    for found in (node, *(coarsen(node, k)[0] for k in N_BINS)):
        assert np.all(np.diff(found.bins.borders) > 0)
        assert np.all(np.diff(found.scores) > 0)
        assert found.marginal.min() > 0
        assert found.marginal.sum() == pytest.approx(1.0, abs=1e-12)
        assert found.n_bins == len(found.marginal) == found.bins.n_bins <= MAX_BINS
        assert len(found.scores) == len(found.firm) == found.n_bins - 1


@given(st.sampled_from(KINDS), st.integers(1, 300), SEEDS, st.sampled_from(N_BINS))
def test_a_reading_outside_the_range_never_shares_a_bin_with_one_inside(
    kind: str, n: int, seed: int, n_bins: int
) -> None:
    sample = a_sample(kind, n, seed)
    fine = choose_bins(sample, MEASURED)
    low, high = float(sample.min()), float(sample.max())
    outside = [np.nextafter(low, -np.inf), np.nextafter(high, np.inf), -1e300, 1e300]
    outside += [low - spread_of(sample), high + spread_of(sample)]
    for node in (fine, coarsen(fine, n_bins)[0]):
        assert not bins_at(node, sample) & bins_at(node, np.array(outside))


def test_bins_fixed_by_hand_are_kept_and_the_outside_stays_outside() -> None:
    channel = Channel(name="c", bins=(-5.0, 0.0, 0.5, 99.0))
    sample = a_sample("normal", 400, 3)
    fine = choose_bins(sample, channel)
    for node in (fine, coarsen(fine, 12)[0]):
        inside = node.bins.borders[(node.bins.borders > sample.min())]
        inside = inside[inside <= sample.max()]
        assert inside.tolist() == [0.0, 0.5]
        beyond = np.array([sample.min() - 1e-9, sample.max() + 1e-9])
        assert not bins_at(node, sample) & bins_at(node, beyond)


# One reading says nothing of a spread, so it has no distance either.
@pytest.mark.parametrize("side", [-1.0, 1.0])
@pytest.mark.parametrize("kind", [kind for kind in KINDS if kind != "one reading"])
def test_surprise_rises_with_distance_beyond_the_range(kind: str, side: float) -> None:
    sample = a_sample(kind, 2000, 5)
    end = sample.max() if side > 0 else sample.min()
    steps = np.concatenate([[0.0], np.geomspace(0.01, 300, 60)]) * spread_of(sample)
    for node in (choose_bins(sample, MEASURED), coarsen(choose_bins(sample, MEASURED), 16)[0]):
        seen = surprise(node, end + side * steps)
        assert np.all(np.diff(seen) >= -1e-9)
        # Far out is impossible by this channel alone, and still a number.
        assert 50 < seen[-1] < 120
        assert seen[-1] > surprise(node, sample).max() + 30


@pytest.mark.parametrize("kind", KINDS)
def test_every_reading_has_a_finite_surprise(kind: str) -> None:
    node = choose_bins(a_sample(kind, 500, 6), MEASURED)
    everywhere = np.concatenate(
        [-np.geomspace(1e-300, 1e300, 50), [0.0], np.geomspace(1e-300, 1e300, 50)]
    )
    assert np.all(np.isfinite(surprise(node, everywhere)))


def test_an_empty_gap_between_two_modes_is_as_surprising_as_a_record_never_seen() -> None:
    sample = a_sample("bimodal", 2000, 7)
    fine = choose_bins(sample, MEASURED)
    for node in (fine, *(coarsen(fine, k)[0] for k in N_BINS)):
        gap = surprise(node, np.array([20.0, 40.0, 60.0, 80.0]))
        assert np.all(gap > math.log(2000))
        assert not bins_at(node, sample) & bins_at(node, np.array([20.0, 80.0]))
        assert np.median(surprise(node, sample)) < math.log(100)


def test_a_clamped_channel_has_the_clamp_as_a_bin_of_its_own() -> None:
    sample = a_sample("clamped", 5000, 8)
    fine = choose_bins(sample, MEASURED)
    for node in (fine, coarsen(fine, 12)[0]):
        for value in (0.0, 100.0):
            (bin_number,) = bins_at(node, np.array([value]))
            inside = sample[(sample > 0) & (sample < 100)]
            assert bin_number not in bins_at(node, inside)
            share = float((sample == value).mean())
            assert node.marginal[bin_number] == pytest.approx(share, rel=0.01)


def test_a_quantised_channel_has_a_bin_for_each_common_value() -> None:
    sample = a_sample("quantised", 5000, 9)
    node = choose_bins(sample, MEASURED)
    values, counts = np.unique(sample, return_counts=True)
    common = values[counts > 100]
    assert len(bins_at(node, common)) == len(common)
    for value in common:
        low, high = node.bins.interval(bins_at(node, np.array([value])).pop())
        assert value - 0.5 < low < value < high < value + 0.5


@pytest.mark.parametrize(("value", "n"), [(7.5, 1000), (0.0, 1000), (-1e6, 50)])
def test_a_constant_channel_expects_its_value_and_nothing_else(value: float, n: int) -> None:
    node = choose_bins(np.full(n, value), MEASURED)
    assert surprise(node, np.array([value]))[0] < 3 / n
    off = np.array([value - 1e-3 * max(abs(value), 1), value + 1e-3 * max(abs(value), 1)])
    assert np.all(surprise(node, off) > math.log(n))


def test_a_constant_channel_is_known_no_better_than_it_is_read() -> None:
    sample = np.full(1000, 5.0)
    sharp = choose_bins(sample, Channel(name="c", resolution=0.01))
    blunt = choose_bins(sample, Channel(name="c", resolution=0.5))
    near = np.array([5.5])
    assert surprise(sharp, near)[0] > surprise(blunt, near)[0] + 10


def test_values_that_hardly_ever_come_are_rare_and_not_impossible() -> None:
    sample = a_sample("nearly constant", 5000, 11)
    node = choose_bins(sample, MEASURED)
    others = surprise(node, sample[sample != 7.5])
    assert surprise(node, np.array([7.5]))[0] < 0.05
    assert np.all((others > 3) & (others < 2 * math.log(5000)))


def test_on_and_off_have_their_shares() -> None:
    sample = a_sample("on and off", 5000, 12)
    seen = surprise(choose_bins(sample, MEASURED), np.array([0.0, 1.0]))
    shares = np.array([(sample == 0).mean(), (sample == 1).mean()])
    np.testing.assert_allclose(np.exp(-seen), shares, rtol=0.01)


@pytest.mark.parametrize("kind", ["normal", "heavy-tailed", "skewed"])
@pytest.mark.parametrize("n_bins", N_BINS)
def test_inside_the_range_bins_are_about_equally_full(kind: str, n_bins: int) -> None:
    sample = a_sample(kind, 20_000, 13)
    node, _ = coarsen(choose_bins(sample, MEASURED), n_bins)
    rows = BinTable.of((node.bins,)).rows(sample[:, None])[:, 0]
    counts = np.bincount(rows, minlength=node.n_bins)
    assert counts.max() < 1.5 * 20_000 / n_bins
    np.testing.assert_allclose(
        node.marginal[counts > 200], counts[counts > 200] / 20_000, rtol=0.01
    )


@given(st.sampled_from(KINDS), st.integers(2, 400), SEEDS, st.sampled_from(N_BINS))
def test_every_choice_is_unions_of_the_fine_bins(kind: str, n: int, seed: int, n_bins: int) -> None:
    fine = choose_bins(a_sample(kind, n, seed), MEASURED)
    coarse, into = coarsen(fine, n_bins)
    assert len(into) == fine.n_bins
    assert into[0] == 0
    assert into[-1] == coarse.n_bins - 1
    assert set(np.diff(into.astype(int))) <= {0, 1}
    kept = np.flatnonzero(np.diff(into.astype(int)))
    np.testing.assert_array_equal(coarse.bins.borders, fine.bins.borders[kept])
    np.testing.assert_array_equal(coarse.scores, fine.scores[kept])
    wanted = np.bincount(into, weights=fine.marginal)
    np.testing.assert_allclose(coarse.marginal, wanted, rtol=1e-12)


def test_fewer_bins_are_wanted_and_fewer_come() -> None:
    fine = choose_bins(a_sample("normal", 5000, 14), MEASURED)
    sizes = [coarsen(fine, k)[0].n_bins for k in N_BINS]
    assert sizes == sorted(sizes)
    assert sizes[-1] > sizes[0] + 20


def test_beyond_the_range_scores_go_on_by_the_spread_of_the_channel() -> None:
    # The same shape twice as wide: a reading as many spreads out is as surprising.
    sample = a_sample("normal", 3000, 15)
    for scale in (1.0, 2.0, 1000.0):
        node = choose_bins(sample * scale, MEASURED)
        out = surprise(node, (sample.max() + np.array([0.4, 1.2, 4.0])) * scale)
        np.testing.assert_allclose(
            out,
            surprise(choose_bins(sample, MEASURED), sample.max() + np.array([0.4, 1.2, 4.0])),
            rtol=1e-6,
        )


def test_what_blocks_of_time_put_beyond_each_other_is_expected_beyond_the_range() -> None:
    # A slow climb: each block of 100 lies beyond all before it.
    sample = np.arange(1000.0)
    blocks = np.repeat(np.arange(10), 100)
    assert unseen_ends(sample, blocks) == (10.0, 10.0)
    # Blocks that agree leave half a reading at either end.
    mixed = np.random.default_rng(1).permutation(sample)
    below, above = unseen_ends(mixed, blocks)
    assert 0.5 <= below <= 10.0
    assert 0.5 <= above <= 10.0
    assert unseen_ends(np.tile(sample[:100], 10), blocks) == (0.5, 0.5)
    assert unseen_ends(sample[:0], blocks[:0]) == unseen_ends(sample, blocks * 0) == (0.5, 0.5)


@pytest.mark.parametrize("n", [200, 5000])
def test_a_range_that_blocks_do_not_agree_on_is_less_of_an_end(n: int) -> None:
    sample = a_sample("normal", n, 17)
    out = sample.max() + np.array([0.1, 0.5, 2.0])
    firm = choose_bins(sample, MEASURED)
    loose = choose_bins(sample, MEASURED, ends=(5.0, 0.01 * n))
    assert np.all(surprise(loose, out) < surprise(firm, out))
    assert not bins_at(loose, sample) & bins_at(loose, out)
    below = float(loose.marginal[: len(LADDER)].sum())
    assert below == pytest.approx(5.0 / n, rel=0.1)


def a_state(*words: str) -> Channel:
    """Return a state."""
    return Channel(name="s", kind="state", words=words)


def test_a_state_has_half_a_record_for_every_word() -> None:
    sample = np.array([0.0, 0.0, 0.0, 1.0])
    node = choose_bins(sample, a_state("on", "off"))
    np.testing.assert_allclose(node.marginal, np.array([3.5, 1.5, 0.5]) / 5.5, rtol=1e-14)
    assert node.bins.n_words == 2
    same, into = coarsen(node, 12)
    np.testing.assert_array_equal(same.marginal, node.marginal)
    assert into.tolist() == [0, 1, 2]


@pytest.mark.parametrize("channel", [MEASURED, a_state("on", "off")])
def test_a_channel_that_was_never_read_still_has_bins(channel: Channel) -> None:
    node = choose_bins(np.zeros(0), channel)
    assert node.marginal.sum() == pytest.approx(1.0)
    assert node.marginal.min() > 0
    coarse, into = coarsen(node, 12)
    assert len(into) == node.n_bins
    assert coarse.n_bins == node.n_bins


def test_many_values_that_repeat_still_fit_in_a_byte() -> None:
    rng = np.random.default_rng(16)
    sample = np.repeat(rng.normal(size=400), 20)
    node: Any = choose_bins(sample, MEASURED)
    assert node.n_bins <= MAX_BINS
