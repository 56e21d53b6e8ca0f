"""A month of nights with the whole plant: two stations, twenty channels, every ten minutes.

Run by `make soak`; some ten minutes for each story. ODDBRANCH_TEST_SEED chooses another
plant. Normal nights publish, a drift of three weeks and a bad week are not learned, a
declared new impeller is accepted.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner

from scoring.alerts import time_text
from tests.months import HISTORY_DAYS, Month, a_month, day_ns
from training.learn import learn_model
from training.models import models_command
from training.plant.channels import NAMES
from training.plant.incidents import Incident
from training.settings import LearnSettings

pytestmark = pytest.mark.soak

SEED, N_STATIONS, STEP_S = int(os.environ.get("ODDBRANCH_TEST_SEED", "9201")), 2, 600
# In the order of the stations.
FIRST, SECOND = "mill-lane", "quarry-rise"


def a_site(folder: Path, *incidents: Incident, seed: int = SEED) -> Month:
    return a_month(
        folder, NAMES, seed=seed, n_stations=N_STATIONS, step_s=STEP_S, incidents=incidents
    )


def told(month: Month) -> str:
    """Return what happened, and tell it: a long run should leave its story."""
    story = "\n".join(month.story())
    sys.stdout.write(f"{story}\n")
    sys.stdout.flush()
    return "\n".join([story, *month.told[-16:]])


def test_a_month_of_normal_nights_publishes_nearly_always(tmp_path: Path) -> None:
    with a_site(tmp_path).serving() as month:
        nights = []
        for _ in range(28):
            month.live_day()
            # The crew looks at every alert, and there was nothing.
            month.label("nuisance")
            nights.append(month.night())
        story = told(month)
        published = sum(one.verdict == "published" for one in nights)
        assert published >= 25, story
        # A refused night is made good by the next ones.
        verdicts = [one.verdict for one in nights]
        assert all("published" in verdicts[k : k + 3] for k in range(len(verdicts) - 2)), story


@pytest.mark.parametrize(("channel", "size"), [("flow", 8.0), ("bearing_temperature_1", 8.0)])
def test_a_drift_of_three_weeks_is_raised_and_named_by_the_model_of_the_last_night(
    tmp_path: Path, channel: str, size: float
) -> None:
    start, end = HISTORY_DAYS + 7, HISTORY_DAYS + 28
    drift = Incident(FIRST, day_ns(start), day_ns(end), "drift", size, (channel,))
    with a_site(tmp_path, drift).serving() as month:
        month.days_and_nights(end - HISTORY_DAYS)
        story = told(month)
        raised = month.replayed([end - 1], FIRST)
        assert raised, story
        assert channel in [alert.suspects[0].channel for alert in raised], story
        # A night that learned whatever came would have taken it for normal, more or less.
        with month.spool(range(HISTORY_DAYS, end)) as spool:
            naive = learn_model(spool, month.table, LearnSettings()).model
        worst = max(alert.worst_excess or 0.0 for alert in raised)
        taught = [a.worst_excess or 0.0 for a in month.replayed([end - 1], FIRST, naive)]
        assert max(taught, default=0.0) < worst, story


@pytest.mark.parametrize(
    "bad",
    [
        ("offset", 6.0, ("power",), 0),
        ("blocked_strainer", 6.0, ("suction_pressure",), 0),
    ],
)
def test_a_bad_week_is_not_learned(
    tmp_path: Path, bad: tuple[str, float, tuple[str, ...], int]
) -> None:
    kind, size, channels, pump = bad
    start = HISTORY_DAYS + 3
    incident = Incident(FIRST, day_ns(start), day_ns(start + 7), kind, size, channels, pump)
    with a_site(tmp_path, incident).serving() as month:
        month.days_and_nights(17)
        story = told(month)
        nights = list(month.outcomes.values())
        assert {one.verdict for one in nights[4:9]} == {"refused"}, story
        assert "published" in [one.verdict for one in nights[-4:]], story
        again = month.replayed(range(start + 2, start + 6), FIRST)
        assert again, story
        assert again[0].suspects[0].channel in channels, story


def test_a_new_impeller_is_accepted_once_it_is_declared(tmp_path: Path) -> None:
    with a_site(tmp_path).serving() as month:
        month.days_and_nights(3)
        before, since = month.in_use, month.day
        physics = month.stations[1].physics
        one, two = (pump._replace(shutoff_m=1.1 * pump.shutoff_m) for pump in physics.pumps)
        month.rebuild(1, physics._replace(pumps=(one, two)))
        undeclared = month.days_and_nights(3)
        assert undeclared[-1].verdict == "refused", told(month)
        words = [
            "--folder", str(month.models.folder), "since", time_text(day_ns(since)),
            "--source", SECOND, "--reason", "new impellers",
        ]  # fmt: skip
        CliRunner().invoke(models_command, words, catch_exceptions=False)
        month.days_and_nights(8)
        story = told(month)
        assert month.in_use.members[SECOND].about["first_ns"] >= day_ns(since), story
        days = range(since + 1, month.day)
        was, now = (
            sum(alert.n_over for alert in month.replayed(days, SECOND, model))
            for model in (before, month.in_use)
        )
        assert now < 0.1 * was, story
