"""What the judge finds at one source, by whoever does the work: alerts, density, run-away.

Nothing but the source's own records and its members of the models are needed for it, so it can
be found anywhere; what comes back is put together in the order of the sources.
"""

from __future__ import annotations

import tempfile
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.model import Model
from training.history.spool import Spool
from training.judge_density import Sums, as_read_by, sums_of
from training.judge_runaway import Residual, residuals_of
from training.online import Online

Ints = NDArray[np.int64]

HOUR_NS: Final = 3600 * 10**9


@dataclass(frozen=True)
class Asked:
    """One source's records from the judge's days, and models with its member alone.

    spool: holds them in the order of the new model's instruments. old: the model in use, None
    where it is no measure; after_ns: it did not learn what came after. witness: the oldest
    kept model that may speak, None for none.
    """

    source: str
    spool: Spool
    new: Model
    old: Model | None
    after_ns: int
    witness: Model | None


@dataclass(frozen=True)
class Told:
    """What was found. hours: (n,) with a record, since 1970. n_alerts: within the budget.

    n_judged: records. own: the new model beside itself; compared: beside the old one, None
    where that is no measure. residuals: under the witness.
    """

    hours: Ints
    n_alerts: int
    n_judged: int
    own: Sums
    compared: Sums | None
    residuals: list[Residual]


def only(model: Model, source: str) -> Model:
    """Return a model with what scores one source alone, to be sent anywhere."""
    member = model.member(source)
    members = {source: member} if source in model.members else {}
    # Where the source has a member of its own nobody asks the fleet's, and twice the same
    # travels once.
    return replace(model, members=members, fleet=member, about={})


def tell(asked: Asked, block_ns: int, until_ns: int, folder: Path) -> Told:
    """Return what is found at one source.

    block_ns: blocks of time that densities are summed over. until_ns: the newest record of all
    sources. folder: for temporary files.
    """
    source, new, old = asked.source, asked.new, asked.old
    parts = list(asked.spool.chunks(source))
    times_ns, values = (np.concatenate(part) for part in zip(*parts, strict=True))
    n_alerts, n_judged = _alerts(new, source, times_ns, values, until_ns, folder)
    compared = None
    if old is not None:
        later = times_ns > asked.after_ns
        if later.any():
            compared = sums_of(new, old, (source, times_ns[later], values[later]), block_ns)
    residuals: list[Residual] = []
    if asked.witness is not None:
        read = as_read_by(asked.witness, new, values)
        residuals = residuals_of(asked.witness, source, times_ns, read)
    own = sums_of(new, new, (source, times_ns, values), block_ns)
    return Told(np.unique(times_ns // HOUR_NS), n_alerts, n_judged, own, compared, residuals)


def _alerts(
    new: Model,
    source: str,
    times_ns: Ints,
    values: NDArray[np.float64],
    until_ns: int,
    folder: Path,
) -> tuple[int, int]:
    """Return how many alerts of the budget the new model would have raised; records judged."""
    with tempfile.TemporaryDirectory(prefix="judged-", dir=folder) as place:
        online = Online(new, Path(place))
        online.add(source, times_ns, values)
        online.finish(until_ns)
        return len(online.calls()), sum(one.n_judged for one in online.excess)
