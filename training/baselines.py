"""What a plant would use without us: operating limits, and PCA with T2 and SPE.

Both are fitted on the history of one source, score records of any number, and name a
suspect. They set no levels: whoever compares gives all methods the same false rate.
Arrays are as everywhere: (n, n_channels), NaN for a missing reading, states as the index
of their word.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from scoring.errors import OddbranchError

Floats = NDArray[np.float64]
Statistic = Literal["t2", "spe", "both"]

# A channel that never moved still has a spread, or its first change would be infinite.
_LEAST_SPREAD: Final = 1e-9
# T2 and SPE are put on one scale by this quantile of the history's own values.
_USUAL_QUANTILE: Final = 0.99
# Records drawn evenly from a long history for that quantile; 99 % of 200,000 is exact enough.
_MOST_USUAL_ROWS: Final = 200_000
_BLOCK_ROWS: Final = 65_536


class BadBaseline(OddbranchError):
    """A baseline cannot be fitted on this history."""


@dataclass(frozen=True, slots=True)
class OperatingLimits:
    """Each channel's own low and high limit.

    low, high, spread: (n_channels,) in the channel's unit; NaN where a channel never
    reported, which then never counts.
    """

    low: Floats
    high: Floats
    spread: Floats

    def excursion(self, values: Floats) -> Floats:
        """Return how far each reading lies outside, (n, n_channels), in spreads; 0 inside."""
        outside = np.maximum(self.low - values, values - self.high) / self.spread
        return np.where(np.isnan(outside), 0.0, np.maximum(outside, 0.0))

    def score(self, values: Floats) -> Floats:
        """Return the largest excursion of each record, (n,), in spreads; 0 inside all limits."""
        largest: Floats = self.excursion(values).max(axis=1)
        return largest

    def suspect(self, values: Floats) -> NDArray[np.int64]:
        """Return the channel with the largest excursion, (n,), -1 inside all limits."""
        excursion = self.excursion(values)
        largest: NDArray[np.int64] = excursion.argmax(axis=1)
        return np.where(excursion.max(axis=1) > 0.0, largest, -1)


def fit_limits(values: Floats, *, tail: float = 0.001, widening: float = 0.5) -> OperatingLimits:
    """Set limits as engineers do: a little beyond what has been seen.

    values: (n, n_channels), the history of one source. tail: share of the history beyond
    each quantile. widening: in spreads, added beyond each quantile.
    A spread is half the distance from the 16 % to the 84 % quantile (one standard
    deviation if normal), or the standard deviation where more than two thirds of the
    history are one value, as for a pump that mostly stands.
    """
    _refuse_empty(values, 2)
    kept = [column[~np.isnan(column)] for column in values.T]
    rows = [_limits_of(column, tail, widening) for column in kept]
    low, high, spread = np.array(rows).T
    return OperatingLimits(low, high, spread)


def _limits_of(column: Floats, tail: float, widening: float) -> tuple[float, float, float]:
    if len(column) == 0:
        return np.nan, np.nan, np.nan
    marks = np.quantile(column, [tail, 0.16, 0.84, 1.0 - tail])
    spread = float(0.5 * (marks[2] - marks[1])) or float(column.std())
    spread = max(spread, _LEAST_SPREAD)
    return float(marks[0]) - widening * spread, float(marks[3]) + widening * spread, spread


class PcaSums:
    """Sums from which PCA is fitted, so that a history can come in batches.

    Missing readings count as the mean of their channel over the whole history, exactly as
    if they had been filled in beforehand.
    """

    def __init__(self, n_channels: int) -> None:
        self.n_records = 0
        self._shift: Floats | None = None
        self._n_both = np.zeros((n_channels, n_channels))
        # Entry [i, j]: sum of channel i over records in which j is there too.
        self._sum = np.zeros((n_channels, n_channels))
        self._product = np.zeros((n_channels, n_channels))

    def add(self, values: Floats) -> None:
        """Take in a batch, (n, n_channels)."""
        there = ~np.isnan(values)
        if self._shift is None:
            # Sums about the first batch's mean keep their digits; zero would not.
            n_there = np.maximum(there.sum(axis=0), 1)
            self._shift = np.where(there, values, 0.0).sum(axis=0) / n_there
        mask = there.astype(np.float64)
        moved = np.where(there, values - self._shift, 0.0)
        self.n_records += len(values)
        self._n_both += mask.T @ mask
        self._sum += moved.T @ mask
        self._product += moved.T @ moved

    def moments(self) -> tuple[Floats, Floats]:
        """Return mean (n_channels,) and covariance (n_channels, n_channels).

        Raises BadBaseline before two records.
        """
        if self._shift is None or self.n_records < 2:
            raise BadBaseline(f"PCA needs at least 2 records, {self.n_records} given")
        n_own = np.maximum(np.diag(self._n_both), 1.0)
        mean = np.diag(self._sum) / n_own
        cross = mean[:, None] * self._sum.T
        summed = self._product - cross - cross.T + np.outer(mean, mean) * self._n_both
        return mean + self._shift, summed / (self.n_records - 1)


@dataclass(frozen=True, slots=True)
class Pca:
    """A fitted PCA of standardised channels.

    mean, scale: (n_channels,). loadings: (n_channels, n_components), orthonormal columns.
    variances: (n_components,), of the scores. share: variance the components carry.
    usual_t2, usual_spe: 99 % quantiles of the history, the unit of `score`.
    statistic: which of the two `score` and `suspect` go by; "both" is the larger ratio.

    T2 = sum_a t_a^2 / lambda_a and SPE (also Q) = |x - P P' x|^2: Jackson & Mudholkar 1979,
    Technometrics 21(3), 341-349. Their contributions: x_j (P L^-1 P' x)_j, which sum to T2,
    and the squared residuals.
    """

    mean: Floats
    scale: Floats
    loadings: Floats
    variances: Floats
    share: float
    usual_t2: float = 1.0
    usual_spe: float = 1.0
    statistic: Statistic = "both"

    @property
    def n_components(self) -> int:
        """Number of components kept."""
        return int(self.loadings.shape[1])

    def t2(self, values: Floats) -> Floats:
        """Return T2 of each record, (n,)."""
        total: Floats = self.t2_contributions(values).sum(axis=1)
        return total

    def spe(self, values: Floats) -> Floats:
        """Return the squared prediction error of each record, (n,), standardised units."""
        total: Floats = self.spe_contributions(values).sum(axis=1)
        return total

    def t2_contributions(self, values: Floats) -> Floats:
        """Return each channel's part of T2, (n, n_channels)."""
        x = self._standardise(values)
        return x * (x @ self.loadings / self.variances @ self.loadings.T)

    def spe_contributions(self, values: Floats) -> Floats:
        """Return each channel's part of SPE, (n, n_channels)."""
        x = self._standardise(values)
        return np.square(x - x @ self.loadings @ self.loadings.T)

    def score(self, values: Floats) -> Floats:
        """Return T2 or SPE over its usual 99 % point, or the larger of the two, (n,)."""
        t2, spe = self.t2(values) / self.usual_t2, self.spe(values) / self.usual_spe
        return {"t2": t2, "spe": spe, "both": np.maximum(t2, spe)}[self.statistic]

    def suspect(self, values: Floats) -> NDArray[np.int64]:
        """Return the channel with the largest contribution, (n,).

        With "both", to the statistic that stands further over its usual.
        """
        by_t2, by_spe = self.t2_contributions(values), self.spe_contributions(values)
        rather_t2 = by_t2.sum(axis=1) / self.usual_t2 > by_spe.sum(axis=1) / self.usual_spe
        if self.statistic != "both":
            rather_t2[:] = self.statistic == "t2"
        largest_t2: NDArray[np.int64] = by_t2.argmax(axis=1)
        return np.where(rather_t2, largest_t2, by_spe.argmax(axis=1))

    def _standardise(self, values: Floats) -> Floats:
        """Return values in standard deviations; a missing reading is its mean, 0."""
        return np.nan_to_num((values - self.mean) / self.scale, nan=0.0)


def fit_pca(values: Floats, *, variance_share: float = 0.9, statistic: Statistic = "both") -> Pca:
    """Fit PCA on the history of one source, (n, n_channels).

    variance_share: as few components are kept as carry at least this share; above 0, and
    at most 1. A channel that never moves is centred and left without weight.
    Raises BadBaseline for fewer than 2 records or a share out of range.
    """
    _refuse_empty(values, 2)
    return fit_pca_batches([values], variance_share=variance_share, statistic=statistic)


def fit_pca_batches(
    batches: Iterable[Floats], *, variance_share: float = 0.9, statistic: Statistic = "both"
) -> Pca:
    """Fit PCA as `fit_pca` does, on batches that come one after the other.

    Only sums are kept, and at most 200,000 records, evenly spaced, for the 99 % points.
    """
    if not 0.0 < variance_share <= 1.0:
        raise BadBaseline(f"variance_share = {variance_share} is outside 0 to 1")
    sums: PcaSums | None = None
    sample = _EvenSample(_MOST_USUAL_ROWS)
    for batch in batches:
        sums = sums or PcaSums(batch.shape[1])
        sums.add(batch)
        sample.add(batch)
    if sums is None:
        raise BadBaseline("PCA needs at least 2 records, none given")
    return _with_usual(_components(*sums.moments(), variance_share), sample.rows(), statistic)


def _components(mean: Floats, covariance: Floats, variance_share: float) -> Pca:
    deviation = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    scale = np.where(deviation > _LEAST_SPREAD * np.maximum(np.abs(mean), 1.0), deviation, np.inf)
    variances, loadings = np.linalg.eigh(covariance / np.outer(scale, scale))
    variances, loadings = variances[::-1], loadings[:, ::-1]
    total = float(variances.sum())
    if total <= 0.0:
        raise BadBaseline("PCA needs at least one channel that moves; every one stands still")
    carried = np.cumsum(variances) / total
    n = int(np.searchsorted(carried, variance_share - 1e-12)) + 1
    # Beyond the rank there is nothing to divide by.
    n = min(n, int((variances > 1e-10 * variances[0]).sum()))
    # A column's sign is free; the largest loading is made positive, so that runs agree.
    signs = np.sign(loadings[np.abs(loadings).argmax(axis=0), np.arange(len(mean))])
    return Pca(mean, scale, (loadings * signs)[:, :n], variances[:n], float(carried[n - 1]))


def _with_usual(pca: Pca, rows: Floats, statistic: Statistic) -> Pca:
    """Return the PCA with the history's 99 % points of both statistics."""
    blocks = [rows[i : i + _BLOCK_ROWS] for i in range(0, len(rows), _BLOCK_ROWS)]
    t2 = np.concatenate([pca.t2(block) for block in blocks])
    spe = np.concatenate([pca.spe(block) for block in blocks])
    # With every component kept SPE is rounding noise; it must not decide.
    least_spe = 1e-12 * len(pca.mean)
    return Pca(
        pca.mean,
        pca.scale,
        pca.loadings,
        pca.variances,
        pca.share,
        usual_t2=float(np.quantile(t2, _USUAL_QUANTILE)) or 1.0,
        usual_spe=max(float(np.quantile(spe, _USUAL_QUANTILE)), least_spe),
        statistic=statistic,
    )


class _EvenSample:
    """At most a number of rows, evenly spaced over a stream of unknown length."""

    def __init__(self, most: int) -> None:
        self._most, self._every, self._seen, self._n_kept = most, 1, 0, 0
        self._kept: list[Floats] = []

    def add(self, rows: Floats) -> None:
        first = -self._seen % self._every
        self._kept.append(rows[first :: self._every].copy())
        self._seen += len(rows)
        self._n_kept += len(self._kept[-1])
        while self._n_kept > self._most:
            self._kept = [np.concatenate(self._kept)[::2]]
            self._every, self._n_kept = 2 * self._every, len(self._kept[0])

    def rows(self) -> Floats:
        return np.concatenate(self._kept)


def _refuse_empty(values: Floats, least: int) -> None:
    if values.ndim != 2 or len(values) < least:
        n = len(values) if values.ndim else 0
        raise BadBaseline(f"a baseline needs at least {least} records, {n} given")
