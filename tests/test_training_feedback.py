"""What people said of alerts, summed up by channel, with what asks for a person."""

from __future__ import annotations

import pytest

from training.feedback import budget_advice, feedback
from training.stored_alerts import StoredAlert


def said(channel: str, label: str, n: int, kind: str = "scored") -> list[StoredAlert]:
    return [StoredAlert("mill", kind, k, k + 1, label, channel) for k in range(n)]


def test_channels_are_counted_by_label_most_nuisance_first() -> None:
    alerts = said("flow", "real", 2) + said("level", "nuisance", 1) + said("flow", "", 4)
    alerts += said("", "", 1)
    found = feedback(alerts)
    assert [(f.channel, f.nuisance, f.real, f.unlabelled) for f in found] == [
        ("level", 1, 0, 0), ("flow", 0, 2, 4), ("-", 0, 0, 1),
    ]  # fmt: skip
    assert not any(f.advice for f in found)
    assert budget_advice(found) == ""


@pytest.mark.parametrize(
    ("kind", "says"),
    [("scored", "look at the instrument"), ("span", "its span"), ("stuck", "still by nature"),
     ("absent", "mend its line"), ("clock", "look at the instrument")],
)  # fmt: skip
def test_a_channel_with_nuisance_only_asks_for_a_person(kind: str, says: str) -> None:
    found = feedback(said("level", "nuisance", 3, kind) + said("level", "real", 1))
    assert says in found[0].advice
    assert found[0].kinds == (f"{kind} (3)",)
    assert feedback(said("level", "nuisance", 3) + said("level", "real", 3))[0].advice == ""


def test_nuisance_everywhere_speaks_of_the_budget() -> None:
    alerts = [alert for k in range(6) for alert in said(f"c{k}", "nuisance", 1)]
    assert "budget.alerts_per_day" in budget_advice(feedback(alerts))
    assert budget_advice(feedback(alerts + said("c9", "real", 7))) == ""
    assert budget_advice(feedback(alerts + said("c0", "nuisance", 3))) == ""
