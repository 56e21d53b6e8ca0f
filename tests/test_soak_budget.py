"""The long measurement of the alarm budget: does a crew get what was promised, and what for.

Every seed is another utility: six stations learn from 30 days, then 60 quiet days come that
no model saw, and 15 days with incidents. Run by `make soak`; some four minutes a seed.
Seeds from 9000 up are looked at here and nowhere else.
"""

from __future__ import annotations

import sys
import tempfile
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from scoring.alert_settings import AlertSettings
from scoring.artefact import write_model
from scoring.model import Model
from training.history.batch import HistoryBatch
from training.history.spool import Spool
from training.history.tally import Tally
from training.judging import Finding, Sum, grouped
from training.known import Known
from training.learn import learn_model
from training.online import Online
from training.plant.channels import N_CHANNELS, channel_table
from training.plant.draw import IncidentRates
from training.plant.simulate import Chunk, PlantConfig, incidents_of, simulate
from training.promise import Promise
from training.promise_words import season_words
from training.replayed import MethodRow, Replayed, judge_replay
from training.rival_streams import LIMITS, PCA, SPE, T2, fit_rivals
from training.settings import LearnSettings

pytestmark = pytest.mark.soak

SEEDS = range(9110, 9120)
N_STATIONS, STEP_S = 6, 60
HISTORY_DAYS, QUIET_DAYS, INCIDENT_DAYS = 30, 60, 15
# Incidents a station and day; half of their sizes lie below three spreads.
RATES = IncidentRates(per_station_day=2.0)
RECOVERY_S = 7200.0
# The quiet days are counted in stretches, because the season moves on.
STRETCH_DAYS = 10
SETTINGS = LearnSettings()
RIVALS = (LIMITS, PCA, T2, SPE)


@dataclass(frozen=True)
class Outcome:
    """One seed: what was promised, what came on quiet days, what incidents were worth.

    by_stretch: alerts in each ten of the quiet days.
    """

    seed: int
    promise: Promise
    by_stretch: NDArray[np.int64]
    replayed: Replayed

    @property
    def n_quiet(self) -> int:
        """Alerts in all quiet days."""
        return int(self.by_stretch.sum())

    @property
    def limits(self) -> tuple[float, float]:
        """The interval that was promised for them."""
        return self.promise.interval(QUIET_DAYS)


def cut(config: PlantConfig) -> tuple[list[Chunk], Iterator[Chunk]]:
    """Return the history of a run, and the rest of it as it comes."""
    chunks = simulate(config)
    n_history = HISTORY_DAYS * config.n_stations
    return [next(chunks) for _ in range(n_history)], chunks


def spool_of(chunks: Iterable[Chunk]) -> Spool:
    """Return a history as learning reads it."""
    spool, tally = Spool(N_CHANNELS), Tally()
    for chunk in chunks:
        n = len(chunk.times_ns)
        codes, good = np.zeros(n, np.int32), np.full(n, "", dtype=object)
        batch = HistoryBatch(
            Path("plant"), np.arange(n), chunk.times_ns, codes, (chunk.source,), chunk.values, good
        )
        spool.add(batch, (), tally)
    spool.finish(tally)
    return spool


def run_seed(seed: int) -> Outcome:
    """Learn, live through the quiet days, then through days with incidents."""
    config = PlantConfig(
        seed=seed, n_stations=N_STATIONS, step_s=STEP_S, days=HISTORY_DAYS + QUIET_DAYS
    )
    history, quiet = cut(config)
    with tempfile.TemporaryDirectory() as folder, spool_of(history) as spool:
        place = Path(folder)
        result = learn_model(spool, channel_table(STEP_S), SETTINGS)
        assert result.promise is not None
        model = write_model(result.model, place / "model")
        by_stretch = count_quiet(model, quiet, config, place)
        troubled = replace(
            config, days=HISTORY_DAYS + INCIDENT_DAYS, quiet_days=HISTORY_DAYS, rates=RATES
        )
        replayed = live_with_incidents(model, spool, troubled, place)
    return Outcome(seed, result.promise, by_stretch, replayed)


def count_quiet(
    model: Model, quiet: Iterable[Chunk], config: PlantConfig, folder: Path
) -> NDArray[np.int64]:
    """Return the alerts of the quiet days, by stretch."""
    online = Online(model, folder)
    for chunk in quiet:
        online.add(chunk.source, chunk.times_ns, chunk.values)
    online.finish()
    first = config.origin_ns + HISTORY_DAYS * 86_400 * 10**9
    days = np.array([(call.raised_ns - first) // (86_400 * 10**9) for call in online.calls()])
    return np.bincount(days // STRETCH_DAYS, minlength=QUIET_DAYS // STRETCH_DAYS)


def live_with_incidents(model: Model, spool: Spool, config: PlantConfig, folder: Path) -> Replayed:
    """Return what incidents were worth, beside limits and PCA fitted on the same history."""
    budget = SETTINGS.budget.alerts_per_day
    rivals = fit_rivals(spool, model.levels, budget, AlertSettings(), folder, RIVALS)
    _, chunks = cut(config)
    online = Online(model, folder)
    for chunk in chunks:
        online.add(chunk.source, chunk.times_ns, chunk.values)
        for rival in rivals:
            rival.add(chunk.source, chunk.times_ns, chunk.values, folder)
    online.finish()
    known = [
        Known(one.source, one.start_ns, one.end_ns, one.kind, one.size, one.channels)
        for one in incidents_of(config)
    ]
    known.sort(key=lambda one: (one.source, one.start_ns))
    return judge_replay(online, known, rivals, RECOVERY_S)


@cache
def outcomes() -> tuple[Outcome, ...]:
    """Return all seeds' outcomes, told one by one as they come."""
    found = []
    for seed in SEEDS:
        found.append(run_seed(seed))
        tell(quiet_line(found[-1]))
        tell(incident_line(found[-1]))
    tell(*summary(found))
    return tuple(found)


def tell(*lines: str) -> None:
    """Write lines at once; a long run should be seen to go on."""
    sys.stdout.write("\n".join(lines) + "\n")
    sys.stdout.flush()


def quiet_line(one: Outcome) -> str:
    """Return what was promised and what came."""
    low, high = one.limits
    return (
        f"seed {one.seed}: promised {one.promise.per_day():.2f} a day, {low:.0f} to {high:.0f} in "
        f"{QUIET_DAYS} days; came {one.n_quiet} ({one.n_quiet / QUIET_DAYS:.2f} a day), by ten "
        f"days {one.by_stretch.tolist()}"
    )


def incident_line(one: Outcome) -> str:
    """Return what incidents were worth, for every method."""
    parts = []
    for method in one.replayed.methods:
        if not method.own_levels:
            total, large = (
                Sum.of(method.verdict.findings),
                Sum.of(large_of(method.verdict.findings)),
            )
            parts.append(
                f"{method.name}: {total.n_caught} of {total.n}, {large.n_caught} of {large.n} "
                f"large, {large.n_first} named, {method.verdict.false_per_day:.2f} false a day"
            )
    return "  " + "; ".join(parts)


def large_of(findings: Iterable[Finding]) -> list[Finding]:
    """Return the findings on incidents of three spreads and more."""
    return [one for one in findings if one.incident.size is not None and one.incident.size >= 3.0]


def summary(found: list[Outcome]) -> list[str]:
    """Return the figures over all seeds, by kind and size, for every method."""
    n_days = QUIET_DAYS * len(found)
    stretches = np.sum([one.by_stretch for one in found], axis=0) / (STRETCH_DAYS * len(found))
    lines = [
        f"all seeds: {sum(one.n_quiet for one in found) / n_days:.2f} alerts a day on quiet days, "
        f"by ten days {np.round(stretches, 2).tolist()}, budget {SETTINGS.budget.alerts_per_day:g}",
        f"over the upper end: {sum(one.n_quiet > one.limits[1] for one in found)} of {len(found)}",
    ]
    others = [f for one in found for f in one.replayed.with_others.findings]
    lines += [
        f"with the kinds apart from the budget, {kind}: {sum_words(Sum.of(part))}"
        for kind, part in grouped(others, "kind").items()
    ]
    for name in [m.name for m in found[0].replayed.methods if not m.own_levels]:
        findings = [f for one in found for f in method_of(one, name).verdict.findings]
        false = np.mean([method_of(one, name).verdict.false_per_day for one in found])
        lines.append(f"{name}: {false:.2f} false a day")
        for key in ("size", "kind"):
            groups = grouped(findings, key)
            lines += [f"  {group}: {sum_words(Sum.of(part))}" for group, part in groups.items()]
        lines.append(f"  of 3 spreads and more: {sum_words(Sum.of(large_of(findings)))}")
    return lines


def method_of(one: Outcome, name: str) -> MethodRow:
    """Return a method's row at no more false alerts than ours."""
    return next(m for m in one.replayed.methods if m.name == name and not m.own_levels)


def sum_words(total: Sum) -> str:
    """Return a sum as one line."""
    share = total.n_caught / max(total.n, 1)
    first, three = (x / max(total.n_caught, 1) for x in (total.n_first, total.n_three))
    delay = "-" if total.delay_s is None else f"{total.delay_s / 60:.0f} min"
    return (
        f"{total.n_caught} of {total.n} caught ({share:.0%}), suspect right {first:.0%}, in three "
        f"{three:.0%}, median delay {delay}"
    )


def test_the_count_exceeds_the_upper_end_of_its_interval_at_most_once() -> None:
    over = [one.seed for one in outcomes() if one.n_quiet > one.limits[1]]
    assert len(over) <= 1


def test_the_mean_lies_between_half_the_budget_and_the_budget_or_the_model_says_why() -> None:
    budget = SETTINGS.budget.alerts_per_day
    mean = np.mean([one.n_quiet / QUIET_DAYS for one in outcomes()])
    assert mean >= 0.5 * budget
    if mean > budget:
        # The quiet days run from the height of summer into autumn, which 30 days of July did
        # not show; every model must have said so of the channels that the weather moves.
        for one in outcomes():
            assert "room_temperature" in [slow.name for slow in one.promise.slow]
            assert "expect more alerts than promised" in season_words(one.promise)


def test_most_incidents_of_three_spreads_are_caught_and_named() -> None:
    findings = [f for one in outcomes() for f in large_of(one.replayed.verdict.findings)]
    total = Sum.of(findings)
    assert total.n_caught >= 0.8 * total.n
    assert total.n_first >= 0.8 * total.n_caught


@pytest.mark.parametrize("name", RIVALS)
def test_more_is_caught_and_named_than_by_others_at_no_more_false_alerts(name: str) -> None:
    ours = [f for one in outcomes() for f in one.replayed.verdict.findings]
    theirs = [f for one in outcomes() for f in method_of(one, name).verdict.findings]
    assert Sum.of(ours).n_caught > Sum.of(theirs).n_caught
    assert Sum.of(ours).n_first > Sum.of(theirs).n_first
