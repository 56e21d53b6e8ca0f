"""Names that are not known are told with those that are."""

from __future__ import annotations

from training.near import MOST_TOLD, near_words


def test_the_nearest_is_told_whatever_its_letters() -> None:
    assert near_words("mill-lnae", ["quarry-rise", "mill-lane"]) == "; the nearest is 'mill-lane'"
    assert near_words("MILL-LANE", ["mill-lane"]) == "; the nearest is 'mill-lane'"


def test_where_none_is_near_some_are_told() -> None:
    assert near_words("x", ["mill-lane"]) == "; there is 'mill-lane'"
    assert near_words("x", []) == ""
    names = [f"pump-{k:02}" for k in range(MOST_TOLD + 3)]
    assert near_words("x", names[:2]) == "; there are 'pump-00', 'pump-01'"
    assert near_words("x", names).endswith("'pump-07' and 3 more")
