"""A judge's case over the small pump, without a store: for tests of judging and of reports."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scoring.model import Model
from tests.pump import N_LEARNED, SOURCES, STEP_NS, pump_model, pump_times, pump_values
from tests.spools import START_NS
from training.changes import Change
from training.chosen import Chosen
from training.history.batch import HistoryBatch
from training.history.spool import Spool
from training.history.tally import Tally
from training.judge import Case, Witness
from training.learn import LearnResult
from training.nightly_settings import JudgeLimits
from training.replayed import promise_in
from training.stored import Window

Floats = NDArray[np.float64]
N_HELD = 900
CUT_NS = START_NS + (N_LEARNED - 1) * STEP_NS
LIMITS = JudgeLimits(days=N_HELD / 1440, least_hours=12, block_h=1.0)


def known_model() -> Model:
    """Return the pump's model with the first times that its members were learned from."""
    model = pump_model()
    about = {"first_ns": START_NS, "last_ns": CUT_NS}
    members = {s: replace(m, about={**m.about, **about}) for s, m in model.members.items()}
    return replace(model, members=members, about={**model.about, **about})


def spool_from(records: dict[str, Floats], start: int) -> Spool:
    """Return records that begin at a minute."""
    spool, tally = Spool(5), Tally()
    for source, values in records.items():
        n = len(values)
        spool.add(
            HistoryBatch(
                Path("store"), np.arange(n), pump_times(n, start), np.zeros(n, np.int32),
                (source,), values, np.full(n, "", dtype=object),
            ),
            (),
            tally,
        )  # fmt: skip
    spool.finish(tally)
    return spool


def a_case(
    folder: Path,
    *,
    in_use: Model | None = None,
    witnesses: Sequence[Model] = (),
    held: dict[str, Floats] | None = None,
    changes: tuple[Change, ...] = (),
    before: float | None = None,
    learning: dict[str, Floats] | None = None,
    new: Model | None = None,
    **limits: Any,
) -> Case:
    """Return a case whose judge's records follow the learned ones; close its spools."""
    model = new or known_model()
    if held is None:
        held = {source: pump_values(source, N_HELD, N_LEARNED) for source in SOURCES}
    if learning is None:
        learning = {source: pump_values(source, N_LEARNED) for source in SOURCES}
    chosen = Chosen(
        learning=spool_from(learning, 0),
        held=spool_from(held, N_LEARNED),
        window=Window(START_NS, CUT_NS + N_HELD * STEP_NS),
        cut_ns=CUT_NS,
        in_alert={},
        alerts=(),
        changes=changes,
        hours=50,
        n_in_alert_of=Counter(),
    )
    return Case(
        chosen,
        LearnResult(model, {}, None, promise_in(model), 1.0),
        in_use,
        [Witness(f"number {k}", one) for k, one in enumerate(witnesses)],
        LIMITS.model_copy(update=limits),
        before,
        folder,
    )
