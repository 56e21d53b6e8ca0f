"""Operating limits by hand; PCA against scikit-learn and against its own identities."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from sklearn.decomposition import PCA
from sklearn.preprocessing import StandardScaler

from training import baselines
from training.baselines import (
    BadBaseline,
    PcaSums,
    fit_limits,
    fit_pca,
    fit_pca_batches,
)

Floats = NDArray[np.float64]


def sample(n: int = 3000, seed: int = 5) -> Floats:
    """Return correlated channels of very different size, one of them a state."""
    rng = np.random.default_rng(seed)
    hidden = rng.standard_normal((n, 3))
    mixed = hidden @ rng.standard_normal((3, 8)) + 0.2 * rng.standard_normal((n, 8))
    values = 1000.0 + mixed * np.geomspace(1e-2, 1e3, 8)
    values[:, 3] = mixed[:, 3] > 0.0
    return values


VALUES = sample()


@pytest.mark.parametrize("share", [0.5, 0.85, 0.9, 0.99])
def test_pca_equals_scikit_learn(share: float) -> None:
    # scikit-learn's PCA of standardised data with the same share of variance. Its scaler
    # divides by n, ours by n - 1, which changes no correlation but the scale of scores.
    n = len(VALUES)
    scaled = StandardScaler().fit_transform(VALUES) * np.sqrt((n - 1) / n)
    reference = PCA(n_components=share, svd_solver="full").fit(scaled)
    fitted = fit_pca(VALUES, variance_share=share)
    assert fitted.n_components == reference.n_components_
    assert fitted.variances == pytest.approx(reference.explained_variance_, rel=1e-9)
    overlap = np.abs(np.sum(fitted.loadings * reference.components_.T, axis=0))
    assert overlap == pytest.approx(np.ones(fitted.n_components), abs=1e-9)
    scores = reference.transform(scaled)
    t2 = (scores**2 / reference.explained_variance_).sum(axis=1)
    assert fitted.t2(VALUES) == pytest.approx(t2, rel=1e-7)
    spe = ((scaled - reference.inverse_transform(scores)) ** 2).sum(axis=1)
    assert fitted.spe(VALUES) == pytest.approx(spe, rel=1e-7, abs=1e-9)


def test_statistics_have_the_means_their_variances_say() -> None:
    fitted = fit_pca(VALUES)
    # Over the history itself T2 averages to the number of components, and SPE to the
    # variance that was left out, both times (n - 1) / n.
    share = (len(VALUES) - 1) / len(VALUES)
    assert fitted.t2(VALUES).mean() == pytest.approx(share * fitted.n_components)
    left_out = 8.0 * (1.0 - fitted.share)
    assert fitted.spe(VALUES).mean() == pytest.approx(share * left_out)


def test_contributions_sum_to_the_statistic_and_name_the_largest() -> None:
    fitted = fit_pca(VALUES, statistic="spe")
    spoilt = VALUES[:50].copy()
    spoilt[:, 5] += 4.0 * VALUES[:, 5].std()
    assert fitted.spe_contributions(spoilt).sum(axis=1) == pytest.approx(fitted.spe(spoilt))
    assert fitted.t2_contributions(spoilt).sum(axis=1) == pytest.approx(fitted.t2(spoilt))
    assert (fitted.suspect(spoilt) == 5).mean() > 0.9
    assert np.all(fitted.score(spoilt) > np.median(fitted.score(VALUES)))


def test_the_usual_values_are_the_histories_99_percent_points() -> None:
    fitted = fit_pca(VALUES)
    assert (fitted.t2(VALUES) > fitted.usual_t2).mean() == pytest.approx(0.01, abs=0.001)
    assert (fitted.spe(VALUES) > fitted.usual_spe).mean() == pytest.approx(0.01, abs=0.001)


def test_both_is_the_larger_ratio_and_blames_by_it() -> None:
    both, t2, spe = (fit_pca(VALUES, statistic=s) for s in ("both", "t2", "spe"))
    assert np.array_equal(both.score(VALUES), np.maximum(t2.score(VALUES), spe.score(VALUES)))
    by_t2 = t2.score(VALUES) > spe.score(VALUES)
    expected = np.where(by_t2, t2.suspect(VALUES), spe.suspect(VALUES))
    assert by_t2.any()
    assert not by_t2.all()
    assert np.array_equal(both.suspect(VALUES), expected)


def gappy() -> Floats:
    values = VALUES.copy()
    values[np.random.default_rng(6).random(values.shape) < 0.15] = np.nan
    return values


def test_missing_readings_count_as_the_mean() -> None:
    values = gappy()
    filled = np.where(np.isnan(values), np.nanmean(values, axis=0), values)
    with_gaps, without = fit_pca(values), fit_pca(filled)
    assert with_gaps.mean == pytest.approx(without.mean, rel=1e-12)
    assert with_gaps.scale == pytest.approx(without.scale, rel=1e-9)
    assert with_gaps.score(values) == pytest.approx(without.score(filled), rel=1e-6)


@pytest.mark.parametrize("size", [1, 7, 500])
def test_batches_give_what_the_whole_gives(size: int) -> None:
    values = gappy()
    whole = fit_pca(values)
    parts = fit_pca_batches(values[i : i + size] for i in range(0, len(values), size))
    assert parts.mean == pytest.approx(whole.mean, rel=1e-12)
    assert parts.variances == pytest.approx(whole.variances, rel=1e-8)
    assert parts.score(values) == pytest.approx(whole.score(values), rel=1e-5)


def test_a_long_history_is_sampled_evenly(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(baselines, "_MOST_USUAL_ROWS", 400)
    parts = fit_pca_batches(VALUES[i : i + 70] for i in range(0, len(VALUES), 70))
    whole = fit_pca(VALUES[::8], variance_share=parts.share)
    # Every eighth of 3,000 rows is kept; the 99 % point is theirs.
    assert parts.usual_spe == pytest.approx(np.quantile(parts.spe(VALUES[::8]), 0.99), rel=1e-9)
    assert parts.usual_spe == pytest.approx(whole.usual_spe, rel=0.1)


def test_a_channel_that_stands_still_or_never_reports_has_no_weight() -> None:
    values = VALUES.copy()
    values[:, 1], values[:, 6] = 42.0, np.nan
    fitted = fit_pca(values)
    assert np.abs(fitted.loadings[[1, 6]]).max() < 1e-9
    moved = values[:10].copy()
    moved[:, 1] = 43.0
    assert fitted.score(moved) == pytest.approx(fitted.score(values[:10]))


def test_with_every_component_kept_the_residual_does_not_decide() -> None:
    fitted = fit_pca(VALUES, variance_share=1.0)
    assert fitted.n_components == 8
    assert fitted.score(VALUES) == pytest.approx(fitted.t2(VALUES) / fitted.usual_t2)


def test_pca_without_enough_to_learn_from_is_refused() -> None:
    with pytest.raises(BadBaseline, match="at least 2 records, 1 given"):
        fit_pca(VALUES[:1])
    with pytest.raises(BadBaseline, match="at least 2 records, none given"):
        fit_pca_batches([])
    with pytest.raises(BadBaseline, match="at least 2 records, 1 given"):
        fit_pca_batches([VALUES[:1]])
    with pytest.raises(BadBaseline, match="every one stands still"):
        fit_pca(np.ones((10, 3)))
    with pytest.raises(BadBaseline, match=r"variance_share = 1\.5 is outside 0 to 1"):
        fit_pca(VALUES, variance_share=1.5)


def test_sums_of_no_records_give_no_moments() -> None:
    with pytest.raises(BadBaseline, match="at least 2 records, 0 given"):
        PcaSums(3).moments()


def limits_example() -> Floats:
    # 0 to 100 evenly, a state that is mostly 0, a channel that never reports.
    evenly = np.linspace(0.0, 100.0, 1001)
    state = (np.arange(1001) % 10 == 0).astype(np.float64)
    return np.column_stack([evenly, state, np.full(1001, np.nan)])


def test_limits_lie_half_a_spread_beyond_the_outer_quantiles() -> None:
    limits = fit_limits(limits_example())
    # Quantiles 0.1 and 99.9 %; spread half of 84 less 16; by hand.
    assert limits.spread[0] == pytest.approx(34.0)
    assert limits.low[0] == pytest.approx(0.1 - 17.0)
    assert limits.high[0] == pytest.approx(99.9 + 17.0)


def test_a_record_scores_its_largest_excursion_in_spreads() -> None:
    limits = fit_limits(limits_example())
    records = np.array([[50.0, 1.0, 7.0], [116.9 + 34.0, 0.0, np.nan], [-16.9 - 68.0, 0.0, np.nan]])
    assert limits.score(records) == pytest.approx([0.0, 1.0, 2.0])
    assert list(limits.suspect(records)) == [-1, 0, 0]


def test_missing_readings_are_inside_their_limits() -> None:
    limits = fit_limits(limits_example())
    assert list(limits.score(np.full((2, 3), np.nan))) == [0.0, 0.0]


def test_a_state_never_leaves_its_limits_but_an_unknown_word_does() -> None:
    limits = fit_limits(limits_example())
    records = np.array([[50.0, 0.0, 0.0], [50.0, 1.0, 0.0], [50.0, 2.0, 0.0]])
    assert list(limits.score(records)[:2]) == [0.0, 0.0]
    assert limits.suspect(records)[2] == 1


def test_a_channel_that_never_moved_is_outside_as_soon_as_it_moves() -> None:
    limits = fit_limits(np.full((10, 1), 3.0))
    assert limits.score(np.array([[3.0], [3.1]]))[0] == 0.0
    assert limits.suspect(np.array([[3.1]]))[0] == 0


def test_limits_without_history_are_refused() -> None:
    with pytest.raises(BadBaseline, match="at least 2 records, 0 given"):
        fit_limits(np.empty((0, 3)))
