"""A known Gaussian tree: surprise against the exact density, suspects against exact conditionals.

For records x of a density f, -ln p(bins) tends to -ln f(x) less the sum of ln(bin widths)
as bins get fine (Cover & Thomas, Elements of Information Theory, section 8.3, from memory).
The Gaussian's entropy and conditionals are exact (its precision matrix).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache

import click
import numpy as np
import pytest
from numpy.typing import NDArray

from scoring.model import Model
from scoring.scorer import Scorer, Scores
from tests.spools import gaussian_tree, measurements, spool_of, times
from training.learn import learn_model
from training.settings import LearnSettings

Floats = NDArray[np.float64]

EDGES = [(0, 1), (1, 2), (1, 3), (0, 4)]
CORRELATION = 0.8
N_CHANNELS = 5
SIZES = (800, 12_000)


@dataclass(frozen=True)
class Learned:
    """A model with the history it is from and fresh records of the same law, scored."""

    model: Model
    history: Floats
    fresh: Floats
    scores: Scores


@cache
def learned(n: int) -> Learned:
    """Learn from n records."""
    rng = np.random.default_rng(1)
    history = gaussian_tree(rng, n, EDGES, CORRELATION)
    fresh = gaussian_tree(rng, 8000, EDGES, CORRELATION)
    with spool_of({"a": history}) as spool:
        model = learn_model(spool, measurements(N_CHANNELS), LearnSettings()).model
    scores, _ = Scorer(model).score("a", times(len(fresh)), fresh, None)
    return Learned(model, history, fresh, scores)


def covariance() -> Floats:
    """Return the exact covariance: the product of correlations along the path."""
    steps = np.full((N_CHANNELS, N_CHANNELS), 99.0)
    np.fill_diagonal(steps, 0)
    for a, b in EDGES:
        steps[a, b] = steps[b, a] = 1
    for k in range(N_CHANNELS):
        steps = np.minimum(steps, steps[:, [k]] + steps[[k], :])
    return np.asarray(CORRELATION**steps)


def exact_surprise(values: Floats) -> Floats:
    """Return -ln f of each record."""
    precision = np.linalg.inv(covariance())
    log_det = np.linalg.slogdet(covariance())[1]
    square = np.einsum("ni,ij,nj->n", values, precision, values)
    return np.asarray((N_CHANNELS * math.log(2 * math.pi) + log_det + square) / 2)


def per_unit(found: Learned) -> tuple[Floats, NDArray[np.bool_]]:
    """Return each fresh record's surprise plus its sum of ln widths, and where it is inside."""
    member = found.model.members["a"]
    log_widths = np.zeros(len(found.fresh))
    inside = np.ones(len(found.fresh), dtype=bool)
    for k in range(N_CHANNELS):
        borders = member.bins[k].borders
        widths = np.concatenate([[1.0], np.diff(borders), [1.0]])
        log_widths += np.log(widths[found.scores.rows[:, k]])
        inside &= found.fresh[:, k] >= found.history[:, k].min()
        inside &= found.fresh[:, k] <= found.history[:, k].max()
    return found.scores.surprise + log_widths, inside


def test_the_exact_entropy_is_that_of_the_tree() -> None:
    # h = sum of h(channel) less the information of the edges, -ln(1 - r^2) / 2 each.
    wanted = N_CHANNELS / 2 * math.log(2 * math.pi * math.e)
    wanted += len(EDGES) / 2 * math.log(1 - CORRELATION**2)
    fresh = gaussian_tree(np.random.default_rng(9), 200_000, EDGES, CORRELATION)
    assert exact_surprise(fresh).mean() == pytest.approx(wanted, abs=0.02)


@pytest.mark.parametrize("n", SIZES)
def test_the_tree_is_found(n: int) -> None:
    edges = learned(n).model.members["a"].parts[0].tree.edges.tolist()
    assert sorted(map(tuple, edges)) == sorted(EDGES)


def test_surprise_tends_to_the_exact_entropy_and_the_width_of_bins() -> None:
    gaps = []
    for n in SIZES:
        ours, inside = per_unit(learned(n))
        assert inside.mean() > 0.97
        gaps.append(float((ours - exact_surprise(learned(n).fresh))[inside].mean()))
    few, many = gaps
    click.echo(f"above the exact entropy: {few:.3f} nats at {SIZES[0]}, {many:.3f} at {SIZES[1]}")
    # No law codes shorter than the true one; noise of the mean is about 0.01.
    assert -0.02 < many < few
    assert many < 0.1


def test_surprise_follows_the_exact_density_record_by_record() -> None:
    ours, inside = per_unit(learned(SIZES[1]))
    exact = exact_surprise(learned(SIZES[1]).fresh)
    assert np.corrcoef(ours[inside], exact[inside])[0, 1] > 0.95


def test_suspects_are_those_of_the_exact_conditionals() -> None:
    found = learned(SIZES[1])
    precision = np.linalg.inv(covariance())
    spread = 1 / np.sqrt(np.diag(precision))
    rng = np.random.default_rng(5)
    faulty = found.fresh.copy()
    true = rng.integers(0, N_CHANNELS, len(faulty))
    size = rng.choice([-1, 1], len(faulty)) * rng.uniform(3, 6, len(faulty))
    faulty[np.arange(len(faulty)), true] += size * spread[true]
    scores, _ = Scorer(found.model).score("a", times(len(faulty)), faulty, None)
    # The residual of a channel given all the others, in its own conditional spread.
    exact = np.abs(faulty @ precision * spread).argmax(axis=1)
    agree, right = (scores.suspect == exact).mean(), (scores.suspect == true).mean()
    click.echo(
        f"suspects: {agree:.3f} as exact, {right:.3f} right, exact {(exact == true).mean():.3f}"
    )
    assert agree > 0.9
    assert right > (exact == true).mean() - 0.06


def test_expected_readings_are_the_exact_conditional_intervals() -> None:
    found = learned(SIZES[1])
    precision = np.linalg.inv(covariance())
    spread = 1 / np.sqrt(np.diag(precision))
    scores, fresh = found.scores, found.fresh
    scorer = Scorer(found.model)
    widths, middles = [], []
    for r in range(300):
        means = fresh[r] - (precision @ fresh[r]) * spread**2
        for k in range(N_CHANNELS):
            expected = scorer.expected("a", scores.rows[r], k)
            if math.isfinite(expected.low) and math.isfinite(expected.high):
                widths.append((expected.high - expected.low) / (2 * 1.96 * spread[k]))
                middles.append((expected.best - means[k]) / spread[k])
    assert len(widths) > 1200
    assert 0.95 < np.median(widths) < 1.3
    assert abs(np.median(middles)) < 0.1
    assert np.quantile(np.abs(middles), 0.9) < 0.6
