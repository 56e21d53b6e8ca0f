"""History with unlabelled trouble in it: how much is lost of what clean history would catch.

Two utilities, six stations, 30 days learned twice: quiet, and with incidents in some 2 % of the
time that nobody labelled. Both models then live through the same days with incidents.
"""

from __future__ import annotations

import sys
import tempfile
from collections.abc import Iterable
from dataclasses import replace
from pathlib import Path

import pytest

from scoring.artefact import write_model
from tests.test_soak_budget import HISTORY_DAYS, INCIDENT_DAYS, RATES, RECOVERY_S, cut, spool_of
from training.judging import Sum
from training.known import Known
from training.learn import learn_model
from training.online import Online
from training.plant.channels import channel_table
from training.plant.draw import IncidentRates
from training.plant.simulate import Chunk, PlantConfig, incidents_of, simulate
from training.replayed import judge_replay
from training.settings import LearnSettings

pytestmark = pytest.mark.soak

SEEDS, STEP_S = (9130, 9131), 60
# Incidents last some four hours on average, so this puts some 2 % of the time in them.
UNLABELLED = IncidentRates(per_station_day=0.11)


def caught(history: Iterable[Chunk], config: PlantConfig) -> Sum:
    """Return what a model of some history catches on the days after it."""
    with tempfile.TemporaryDirectory() as folder, spool_of(history) as spool:
        result = learn_model(spool, channel_table(STEP_S), LearnSettings())
        model = write_model(result.model, Path(folder) / "model")
        online = Online(model, Path(folder))
        for chunk in cut(config)[1]:
            online.add(chunk.source, chunk.times_ns, chunk.values)
        online.finish()
        known = [
            Known(one.source, one.start_ns, one.end_ns, one.kind, one.size, one.channels)
            for one in incidents_of(config)
        ]
        known.sort(key=lambda one: (one.source, one.start_ns))
        return Sum.of(judge_replay(online, known, [], RECOVERY_S).verdict.findings)


def test_unlabelled_trouble_costs_less_than_five_points_of_what_is_caught() -> None:
    clean, dirty, n, share = 0, 0, 0, 0.0
    for seed in SEEDS:
        config = PlantConfig(
            seed=seed, n_stations=6, step_s=STEP_S, days=HISTORY_DAYS + INCIDENT_DAYS,
            quiet_days=HISTORY_DAYS, rates=RATES,
        )  # fmt: skip
        troubled = replace(config, days=HISTORY_DAYS, quiet_days=0, rates=UNLABELLED)
        seconds = sum(one.end_ns - one.start_ns for one in incidents_of(troubled)) / 1e9
        share += seconds / (6 * HISTORY_DAYS * 86_400) / len(SEEDS)
        found = caught(cut(config)[0], config)
        clean, n = clean + found.n_caught, n + found.n
        dirty += caught(simulate(troubled), config).n_caught
    sys.stdout.write(
        f"{share:.1%} of the history in incidents: {dirty} of {n} caught, {clean} if clean\n"
    )
    assert 0.01 < share < 0.04
    assert dirty / n >= clean / n - 0.05
