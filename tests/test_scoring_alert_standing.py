"""What is remembered of a source's alerts comes back from its bytes as it was."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scoring.alert_actions import Action, take_action
from scoring.alert_kernel import LAST, OPEN, new_floats, new_ints
from scoring.alert_standing import AlertStanding, BadAlertStanding, OutOfService
from scoring.alerts import SCORED
from tests.alert_tools import START_NS, Fed, S, episodes, readings


def plain() -> AlertStanding:
    return AlertStanding(7, -1, new_ints(3), new_floats(3))


def test_a_quiet_source_is_a_few_hundred_bytes() -> None:
    standing = plain()
    assert AlertStanding.from_bytes(standing.to_bytes()) == standing
    # 24 instruments: what is written with every record of a source.
    whole = AlertStanding(7, -1, new_ints(24), new_floats(24)).to_bytes()
    assert len(whole) < 1500


@given(st.lists(st.sampled_from([0.0, 20.0]), min_size=1, max_size=80), st.booleans())
@settings(max_examples=30)
def test_bytes_give_the_same_standing_back(excess: list[float], act: bool) -> None:
    fed = Fed(episodes(still_s=20.0, away_s=0.0))
    values = readings(len(excess))
    values[10:, 1] = 14.0
    values[20:, 2] = float("nan")
    fed.feed(excess, values=values)
    standing = fed.standing
    assert standing is not None
    if act:
        at_ns = standing.last_ns
        for action in (
            Action("shelve", "kit", "known", kind=SCORED, until_ns=at_ns + 3600 * S),
            Action("out_of_service", "kit", "works", start_ns=at_ns + 60 * S),
            Action("out_of_service", "kit", "works", end_ns=at_ns + 30 * S),
        ):
            standing, _ = take_action("a", standing, action, at_ns)
    again = AlertStanding.from_bytes(standing.to_bytes())
    assert again == standing
    assert again.cases == standing.cases
    assert again.shelves == standing.shelves
    assert again.out_of_service == standing.out_of_service
    assert again.raised == standing.raised
    assert again.open == standing.open


@pytest.mark.parametrize(
    ("data", "message"),
    [
        (b"", "format none was met; this version reads format 1"),
        (b"\x02" + bytes(40), "format 2 was met; this version reads format 1"),
        (plain().to_bytes()[:60], "of 60 bytes is not whole"),
        (plain().to_bytes() + b"{", "cannot be read: "),
        (plain().to_bytes() + b"{}", "cannot be read: 'cases'"),
        (plain().to_bytes() + b'{"cases":[1]}', "cannot be read: "),
    ],
)
def test_bytes_that_are_no_standing_are_refused(data: bytes, message: str) -> None:
    with pytest.raises(BadAlertStanding, match=message):
        AlertStanding.from_bytes(data)


def test_standings_are_equal_by_their_bytes_and_have_no_hash() -> None:
    assert plain() == plain()
    assert plain() != AlertStanding(8, -1, new_ints(3), new_floats(3))
    assert plain() != "standing"
    with pytest.raises(TypeError, match="unhashable"):
        hash(plain())


def test_a_standing_started_anew_keeps_only_its_last_time() -> None:
    fed = Fed(episodes())
    fed.feed([20.0] * 5)
    assert fed.standing is not None
    anew = fed.standing.started_anew()
    assert anew.last_ns == fed.standing.last_ns
    assert anew.ints[OPEN] == 0
    assert fed.standing.ints[OPEN] == 1
    assert (anew.ints[:LAST] == new_ints(4)[:LAST]).all()


def test_a_period_out_of_service_covers_its_start_and_not_its_end() -> None:
    period = OutOfService(START_NS, START_NS + 10, "works", "kit")
    assert [period.covers(START_NS + k) for k in (-1, 0, 9, 10)] == [False, True, True, False]
    assert OutOfService(START_NS, None, "works", "kit").covers(START_NS + 10**18)


def test_the_open_case_of_a_kind_is_found() -> None:
    fed = Fed(episodes())
    fed.feed([20.0])
    assert fed.standing is not None
    case = fed.standing.case(SCORED)
    assert case is not None
    assert case.tally is not None
    assert case.tally.nats["out"] > 0
    assert fed.standing.case("stuck") is None
