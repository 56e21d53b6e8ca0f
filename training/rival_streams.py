"""Operating limits and PCA on the records of a replay, each with levels like ours.

Both are fitted source by source on a history. Their scores there set the same two kinds
of levels, by the same procedure, as held-out excess sets ours; theirs are not held out,
which only flatters them.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Final, Protocol

import numpy as np
from numpy.typing import NDArray

from scoring.alert_settings import AlertSettings
from scoring.model import Levels
from training.baselines import fit_limits, fit_pca_batches
from training.heldexcess import ExcessFile, HeldExcess, keep_excess
from training.history.spool import Spool
from training.levels import Curve, curve_of
from training.sweep import Pairs, cap_of

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

LIMITS: Final = "operating limits"
PCA: Final = "PCA, T2 and SPE"
T2: Final = "PCA, T2"
SPE: Final = "PCA, SPE"
# Limits are fitted narrow, a half of a hundredth beyond each; the level then widens all of
# them by as many spreads as the budget asks for. From wider ones there is no way in.
_LIMITS_TAIL: Final = 0.005
# Limits are quantiles: so many records of a source, evenly over its history, are enough.
_MOST_FOR_LIMITS: Final = 200_000
# A source with fewer records of history has no rivals.
_LEAST_RECORDS: Final = 200


class Method(Protocol):
    """A fitted method of one source; see training.baselines."""

    def score(self, values: Floats) -> Floats:
        """Return one number a record, (n,)."""

    def suspect(self, values: Floats) -> Ints:
        """Return the suspect's column, (n,), -1 for none."""


@dataclass
class Rival:
    """One method: a fit for each source, its levels' curve, what it made of the records.

    usual: by source, where its sustained rests.
    """

    name: str
    methods: Mapping[str, Method]
    curve: Curve
    usual: Mapping[str, float]
    files: dict[str, ExcessFile]

    def add(self, source: str, times_ns: Ints, values: Floats, folder: Path) -> None:
        """Score records of one source; a source without history is left out."""
        if source not in self.methods:
            return
        if source not in self.files:
            path = folder / f"{len(self.files)}.{self.name}"
            self.files[source] = ExcessFile(source, path)
            self.files[source].kept.usual = self.usual[source]
        method = self.methods[source]
        self.files[source].add(times_ns, method.score(values), method.suspect(values))

    @property
    def streams(self) -> list[HeldExcess]:
        """What came of the records so far, a source each."""
        return [file.kept for file in self.files.values()]

    def pairs(self, levels: Levels) -> Pairs:
        """Return the pairs of levels of its curve, strict to loose."""
        usual = max(self.usual.values())
        caps = cap_of(self.curve.sustained, usual, levels.tau_s, levels.step_s)
        return Pairs(self.curve.record, self.curve.sustained, caps)


def fit_rivals(
    spool: Spool,
    levels: Levels,
    alerts_per_day: float,
    settings: AlertSettings,
    folder: Path,
    names: Sequence[str] = (LIMITS, PCA),
) -> list[Rival]:
    """Fit rivals on a history and set their levels on it.

    levels: ours, for the interval and the time constant. folder: for their scores. names:
    some of LIMITS, PCA, T2, SPE.
    """
    sources = [s for s in spool.sources if spool.n_records(s) >= _LEAST_RECORDS]
    fits: dict[str, dict[str, Method]] = {name: {} for name in (LIMITS, PCA, T2, SPE)}
    for source in sources:
        fits[LIMITS][source] = fit_limits(_even(spool, source), tail=_LIMITS_TAIL, widening=0.0)
        pca = fit_pca_batches(values for _, values in spool.chunks(source))
        fits[PCA][source] = pca
        fits[T2][source] = replace(pca, statistic="t2")
        fits[SPE][source] = replace(pca, statistic="spe")
    rivals = []
    for number, name in enumerate(names):
        methods = fits[name]
        kept = [
            _history(spool, s, m, folder / f"{number}-{k}")
            for k, (s, m) in enumerate(methods.items())
        ]
        curve = curve_of(kept, levels, alerts_per_day, settings)
        if curve is not None:
            rivals.append(Rival(name, methods, curve, {one.source: one.usual for one in kept}, {}))
        for one in kept:
            one.path.unlink()
    return rivals


def _history(spool: Spool, source: str, method: Method, path: Path) -> HeldExcess:
    scored = ((times_ns, method.score(values)) for times_ns, values in spool.chunks(source))
    return keep_excess(source, spool.n_records(source), scored, path)


def _even(spool: Spool, source: str) -> Floats:
    every = max(1, spool.n_records(source) // _MOST_FOR_LIMITS)
    # Chunks are whole multiples of nothing; a little unevenness at their seams is harmless.
    return np.concatenate([values[::every] for _, values in spool.chunks(source)])
