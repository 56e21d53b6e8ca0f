"""Alerts as the service tells them, and as rivals would have raised them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import orjson
import pytest

from scoring.alerts import Alert
from scoring.channels import ChannelTable, load_channels
from scoring.model import Levels
from training.channel_toml import write_channels
from training.demo_alerts import Told, alerts_of, in_order_of, post_live, rival_calls
from training.demo_plant import N_STATIONS, STEP_S, Plant, joined, simulate_plant
from training.history.options import HistoryOptions
from training.history.spool import spool_history
from training.history.tally import Tally
from training.history.times import parse_time
from training.plant.channels import PUMP_WORDS
from training.plant.writers import write_wide_csv
from training.served import Served
from training.survey import propose, survey_history

LEVELS = Levels(
    record=30.0, sustained=15.0, cap=100.0, tau_s=900.0, step_s=STEP_S, least_readings=10
)
HOUR_NS = 3600 * 10**9


def an_alert(number: int, raised_ns: int, cleared_ns: int | None) -> dict[str, Any]:
    """Return an item as the service's page has it."""
    alert = Alert(
        id=f"{number:016x}",
        source="mill-lane",
        kind="scored",
        likely="instrument",
        state="raised" if cleared_ns is None else "cleared",
        level="sustained",
        since_ns=raised_ns,
        raised_ns=raised_ns,
        cleared_ns=cleared_ns,
        n_over=5,
        sentence="look there",
    )
    return alert.as_json()


class LikeAService(Served):
    """Raises an alert with every request; it is cleared by the next but one."""

    def __init__(self) -> None:
        self.posted: list[str] = []
        self.starts: list[int] = []

    def post(self, records: Any) -> list[dict[str, Any]]:
        self.starts.append(parse_time(records[0]["time"]))
        self.posted += [record["time"] for record in records]
        return []

    def get(self, path: str) -> bytes:
        assert path.startswith("/alerts?")
        ends = [*self.starts[2:], None, None]
        pairs = zip(self.starts, ends[: len(self.starts)], strict=True)
        items = [an_alert(i, start, end) for i, (start, end) in enumerate(pairs)]
        return orjson.dumps({"items": items[::-1], "next": None})


@pytest.fixture(scope="module")
def plant() -> Plant:
    """Return two days of history and a live day."""
    return simulate_plant(7, 2, 1)


def test_an_alert_is_read_as_the_service_writes_it() -> None:
    told = Told.of(an_alert(1, 5 * HOUR_NS, 7 * HOUR_NS))
    assert (told.source, told.level, told.in_budget) == ("mill-lane", "sustained", True)
    assert (told.raised_ns, told.cleared_ns) == (5 * HOUR_NS, 7 * HOUR_NS)
    assert (told.n_over, told.sentence, told.suspects) == (5, "look there", ())


def test_an_alert_that_still_stands_is_judged_up_to_the_end() -> None:
    call = Told.of(an_alert(1, 5 * HOUR_NS, None)).call(9 * HOUR_NS)
    assert (call.raised_ns, call.cleared_ns) == (5 * HOUR_NS, 9 * HOUR_NS)


def test_every_alert_is_told_once_as_soon_as_it_is_cleared(plant: Plant) -> None:
    service = LikeAService()
    seen = []
    for told in post_live(service, plant):
        seen.append((told.id, told.cleared_ns, len(service.starts)))
    n = len(service.starts)
    assert len(service.posted) == plant.n_live
    assert [number for number, _, _ in seen] == [f"{i:016x}" for i in range(n)]
    # Each but the last two is told with the request that cleared it; those stand to the end.
    assert [at for _, _, at in seen[:-2]] == list(range(3, n + 1))
    assert [cleared for _, cleared, _ in seen[-2:]] == [None, None]


def test_alerts_come_in_the_order_in_which_they_were_raised() -> None:
    service = LikeAService()
    service.starts = [HOUR_NS, 2 * HOUR_NS, 3 * HOUR_NS]
    assert [told.raised_ns for told in alerts_of(service)] == service.starts


@pytest.fixture(scope="module")
def learned_from(
    plant: Plant, tmp_path_factory: pytest.TempPathFactory
) -> tuple[Path, Path, ChannelTable]:
    """Return the history's file, its surveyed channel table's file, and the table."""
    folder = tmp_path_factory.mktemp("demo")
    history, channels = folder / "history.csv", folder / "channels.toml"
    write_wide_csv(plant.history, history)
    with Tally() as tally:
        survey = survey_history([history], HistoryOptions(), tally)
    proposed = [propose(facts) for facts in survey.columns.values()]
    channels.write_text(write_channels(proposed, STEP_S), encoding="utf-8")
    return history, channels, load_channels(channels)


def test_rivals_are_fitted_on_the_history_and_run_over_the_live_days(
    plant: Plant, learned_from: tuple[Path, Path, ChannelTable], tmp_path: Path
) -> None:
    history, channels, _ = learned_from
    found = rival_calls(plant, history, channels, LEVELS, 2.0, tmp_path)
    assert list(found) == ["operating limits", "PCA, T2", "PCA, SPE"]
    stations = {chunk.source for chunk in plant.live}
    assert len(stations) == N_STATIONS
    first_ns = min(int(chunk.times_ns[0]) for chunk in plant.live)
    for calls in found.values():
        assert calls
        assert {call.source for call in calls} <= stations
        assert all(first_ns <= call.raised_ns <= call.cleared_ns for call in calls)
        assert all(call.suspects for call in calls)


def test_live_values_are_what_a_reader_of_the_same_records_gives(
    plant: Plant, learned_from: tuple[Path, Path, ChannelTable]
) -> None:
    history, _, table = learned_from
    # The survey lists words by name, the plant does not.
    assert table.instruments[4].words != PUMP_WORDS
    with spool_history([history], table, HistoryOptions()) as spool:
        for source, (times_ns, values) in joined(plant.history).items():
            ((read_ns, read),) = spool.chunks(source)
            np.testing.assert_array_equal(read_ns, times_ns)
            np.testing.assert_array_equal(in_order_of(table, values), read)
