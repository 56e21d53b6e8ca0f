"""Night after night in short: six channels, two stations, a record every quarter of an hour.

The long form, with the whole plant, is `test_soak_nightly.py`.
"""

from __future__ import annotations

from pathlib import Path

from click.testing import CliRunner

from scoring.alerts import time_text
from tests.months import HISTORY_DAYS, Month, a_month, day_ns
from training.chosen import DAY_NS
from training.models import models_command
from training.plant.incidents import Incident

CHANNELS = (
    *("suction_pressure", "discharge_pressure", "flow", "reservoir_level", "power"),
    "valve_position",
)
FIRST, SECOND = "mill-lane", "quarry-rise"
# Half of the records of a station, four weeks at this step.
ENOUGH = {"least_records": 2000}


def a_site(folder: Path, *incidents: Incident, seed: int = 22) -> Month:
    return a_month(
        folder, CHANNELS, seed=seed, n_stations=2, step_s=900, incidents=incidents, history=ENOUGH
    )


def told(month: Month) -> str:
    """Return what happened, for a failed assertion."""
    return "\n".join([*month.story(), *month.told[-12:]])


def test_normal_nights_publish_and_a_drift_of_three_weeks_is_not_learned(tmp_path: Path) -> None:
    start, end = HISTORY_DAYS + 3, HISTORY_DAYS + 24
    drift = Incident(FIRST, day_ns(start), day_ns(end), "drift", 8.0, ("flow",))
    with a_site(tmp_path, drift).serving() as month:
        first = month.in_use
        normal = month.days_and_nights(3)
        assert [one.verdict for one in normal] == ["published"] * 3, told(month)
        later = month.days_and_nights(end - start, every=4)
        # Its beginning is too small to see; from the limit on nothing is published.
        verdicts = [one.verdict for one in later]
        assert "refused" in verdicts, told(month)
        refused = later[verdicts.index("refused") :]
        assert {one.verdict for one in refused} == {"refused"}, told(month)
        assert any(
            a.name == "run-away" and f"flow of {FIRST}" in a.sentence
            for a in refused[-1].judgement.refusals
        ), told(month)
        # The model in use after the last night still raises, and names the instrument.
        raised = month.replayed([end - 1], FIRST)
        assert raised, told(month)
        assert raised[0].suspects[0].channel == "flow"
        # Had a night been let to learn it all, it would not.
        assert month.in_use.about["last_ns"] < day_ns(end - 7)
        assert first.name != month.in_use.name


def test_a_bad_week_is_not_learned(tmp_path: Path) -> None:
    start = HISTORY_DAYS + 1
    bad = Incident(
        FIRST, day_ns(start), day_ns(start + 7), "offset", 6.0, ("power",), direction=-1
    )  # fmt: skip
    with a_site(tmp_path, bad).serving() as month:
        month.days_and_nights(1)
        during = month.days_and_nights(7, every=2)
        assert "published" not in [one.verdict for one in during[1:]], told(month)
        after = month.days_and_nights(4, every=2)
        assert after[-1].verdict == "published", told(month)
        # Nobody labelled it; it is in the window, and not in the tables.
        night = month.last_report()
        left_out = [one for one in night["history"]["left_out_of_tables"] if one["source"] == FIRST]
        assert sum(one["end_ns"] - one["start_ns"] for one in left_out) > 5 * DAY_NS, told(month)
        assert night["alerts_seen_without_left_out"] <= night["alerts_seen"]
        # What knows it now raises on the same again.
        again = month.replayed(range(start + 2, start + 6), FIRST)
        assert again, told(month)
        assert again[0].suspects[0].channel == "power"


def test_a_new_impeller_is_accepted_once_it_is_declared(tmp_path: Path) -> None:
    with a_site(tmp_path).serving() as month:
        month.days_and_nights(1)
        before = month.in_use
        physics = month.stations[1].physics
        wider = tuple(
            pump._replace(
                shutoff_m=1.1 * pump.shutoff_m, best_efficiency=pump.best_efficiency - 0.07
            )
            for pump in physics.pumps
        )
        month.rebuild(1, physics._replace(pumps=(wider[0], wider[1])))
        since = month.day
        assert month.days_and_nights(3, every=3)[0].verdict == "refused", told(month)
        words = [
            "--folder", str(month.models.folder), "since", time_text(day_ns(since)),
            "--source", SECOND, "--reason", "new impellers",
        ]  # fmt: skip
        said = CliRunner().invoke(models_command, words, catch_exceptions=False)
        assert f"{SECOND}: history counts from" in said.output
        nights = month.days_and_nights(5, every=2)
        assert nights[-1].verdict == "published", told(month)
        model = month.in_use
        assert model.name != before.name
        assert model.members[SECOND].about["first_ns"] >= day_ns(since)
        assert model.members[FIRST].about["first_ns"] < day_ns(since)
        # Under the old model the new impeller is one long alert, under the new one it is usual.
        days = range(since + 1, month.day)
        assert month.replayed(days, SECOND, before)
        was, now = (sum(a.n_over for a in month.replayed(days, SECOND, m)) for m in (before, model))
        assert now < 0.1 * was, told(month)
