"""An alert as data: its name, its JSON for clients, its way through a store."""

from __future__ import annotations

import json

import pytest

from scoring.alerts import (
    ADVICE,
    KINDS,
    SCORED,
    STUCK,
    Alert,
    Event,
    Note,
    Suspect,
    alert_id,
    blank_alert,
    second_text,
    time_text,
)

S = 1_000_000_000
AT_NS = 1_796_097_610 * S
ALERT = Alert(
    id=alert_id("mill-lane", SCORED, AT_NS), source="mill-lane", kind=SCORED, likely="instrument",
    state="raised", level="record", since_ns=AT_NS - S, raised_ns=AT_NS, announced_ns=AT_NS,
    suspects=(Suspect("flow", "m3/h", 241.3, 268.0, None, 274.0, None, AT_NS, 0.7),),
    channels=("flow",), neighbours=("power",), sentence="look", n_records=1,
    notes=(Note(AT_NS, "kit", "seen"),),
)  # fmt: skip


def test_the_same_alert_has_the_same_name_and_others_have_others() -> None:
    assert alert_id("a", SCORED, 5) == alert_id("a", SCORED, 5)
    names = {alert_id(s, k, t) for s in ("a", "b") for k in KINDS for t in (5, 6)}
    assert len(names) == 2 * len(KINDS) * 2
    assert all(len(name) == 16 for name in names)


def test_an_alert_comes_back_from_plain_data() -> None:
    assert Alert.from_dict(json.loads(json.dumps(ALERT.to_dict()))) == ALERT


def test_clients_see_times_the_advice_and_an_open_side_as_null() -> None:
    shown = json.loads(json.dumps(ALERT.as_json(), allow_nan=False))
    assert shown["raised"] == "2026-12-01T04:00:10Z"
    assert shown["cleared"] is None
    assert shown["suspects"][0]["high"] is None
    assert shown["suspects"][0]["time"] == "2026-12-01T04:00:10Z"
    assert shown["notes"] == [{"at": "2026-12-01T04:00:10Z", "by": "kit", "text": "seen"}]
    assert shown["channels"] == ["flow"]
    assert shown["in_budget"] is True
    assert shown["advice"] == ADVICE
    assert not [name for name in shown if name.endswith("_ns")]


def test_clients_see_an_event_with_its_alert_and_its_times() -> None:
    details = {"until_ns": AT_NS, "alerts": [{"time_ns": AT_NS, "source": "a"}], "n": 3}
    event = Event("shelved", "mill-lane", AT_NS, ALERT, by="kit", comment="known", details=details)
    shown = json.loads(json.dumps(event.as_json(), allow_nan=False))
    assert shown["alert"] == ALERT.as_json()
    assert (shown["what"], shown["by"], shown["annunciate"]) == ("shelved", "kit", False)
    assert shown["time"] == shown["details"]["until"] == "2026-12-01T04:00:10Z"
    assert shown["details"]["alerts"] == [{"time": "2026-12-01T04:00:10Z", "source": "a"}]
    assert Event("flood_ended", "", AT_NS).as_json()["alert"] is None


def test_the_advice_line_says_what_it_replaces_and_who_decides() -> None:
    for words in ("no alarm, trip or interlock", "licensed practice", "not a protective function"):
        assert words in ADVICE


def test_only_scored_alerts_count_against_the_budget() -> None:
    assert [k for k in KINDS if blank_alert("a", k, "", 1, 2, "m").in_budget] == [SCORED]
    assert blank_alert("a", STUCK, "", 1, 2, "m").is_open


@pytest.mark.parametrize(
    ("time_ns", "text"),
    [
        (0, "1970-01-01T00:00:00Z"), (AT_NS, "2026-12-01T04:00:10Z"),
        (AT_NS + 500_000_000, "2026-12-01T04:00:10.5Z"),
        (AT_NS + 1, "2026-12-01T04:00:10.000000001Z"),
    ],
)  # fmt: skip
def test_times_are_rfc_3339_with_the_decimals_they_have(time_ns: int, text: str) -> None:
    assert time_text(time_ns) == text
    assert second_text(time_ns) == f"{text[:19]}Z"
