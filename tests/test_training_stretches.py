"""Records over a level become stretches."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from training.stretches import OverLevel, Stretch, Stretches

GAP_NS = 100


def over(time_ns: int, source: str = "a", **more: object) -> OverLevel:
    """Return one record over the level."""
    return OverLevel(source, time_ns, **more)  # type: ignore[arg-type]  # any of its fields


def test_a_brief_return_under_the_level_does_not_end_a_stretch() -> None:
    stretches = Stretches(GAP_NS)
    for time_ns in (0, 100, 150, 251):
        stretches.add(over(time_ns))
    found = stretches.close()
    assert [(s.start_ns, s.end_ns, len(s.over)) for s in found] == [(0, 150, 3), (251, 251, 1)]


def test_sources_do_not_share_a_stretch() -> None:
    stretches = Stretches(GAP_NS)
    stretches.add(over(5, "b"))
    stretches.add(over(0, "a"))
    assert [s.source for s in stretches.close()] == ["a", "b"]


def test_an_ended_stretch_is_told_once_and_an_open_one_not_yet() -> None:
    stretches = Stretches(GAP_NS)
    stretches.add(over(0))
    assert stretches.close(GAP_NS) == []
    assert [s.start_ns for s in stretches.close(GAP_NS + 1)] == [0]
    assert stretches.close() == []


def test_the_suspect_is_the_one_with_most_surprise_over_the_whole_stretch() -> None:
    stretch = Stretch(
        "a",
        (
            over(0, suspect="flow", weight=9.0, reading=1.0),
            over(1, suspect="power", weight=6.0, reading=2.0),
            over(2, suspect="power", weight=5.0, reading=3.0),
            over(3),
        ),
    )
    assert (stretch.suspect, stretch.worst.reading) == ("power", 2.0)
    part = stretch.within(0, 1)
    assert part is not None
    assert part.suspect == "flow"


def test_a_stretch_without_suspects_has_none() -> None:
    stretch = Stretch("a", (over(0), over(1)))
    assert (stretch.suspect, stretch.worst.time_ns) == ("", 0)


@pytest.mark.parametrize(("kinds", "kind"), [("rr", "record"), ("rs", "sustained")])
def test_a_stretch_is_sustained_once_that_level_was_passed(kinds: str, kind: str) -> None:
    words = {"r": "record", "s": "sustained"}
    stretch = Stretch("a", tuple(over(i, kind=words[k]) for i, k in enumerate(kinds)))
    assert stretch.kind == kind


def test_a_part_holds_its_start_and_not_its_end() -> None:
    stretch = Stretch("a", (over(0), over(5), over(9)))
    part = stretch.within(5, 9)
    assert part is not None
    assert [o.time_ns for o in part.over] == [5]
    assert stretch.within(1, 5) is None


@given(st.lists(st.tuples(st.integers(0, 3000), st.sampled_from("abc")), max_size=60))
def test_closing_along_the_way_gives_the_same_stretches_as_at_the_end(
    given_records: list[tuple[int, str]],
) -> None:
    at_end, along = Stretches(GAP_NS), Stretches(GAP_NS)
    told: list[Stretch] = []
    for time_ns, source in sorted(given_records):
        at_end.add(over(time_ns, source))
        along.add(over(time_ns, source))
        told += along.close(time_ns)
    told += along.close()
    assert sorted(told, key=lambda s: (s.start_ns, s.source)) == at_end.close()
    assert sum(len(s.over) for s in told) == len(given_records)
