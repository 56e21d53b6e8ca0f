"""The columns of the plant's arrays: each number once, pumps side by side."""

from __future__ import annotations

import pytest

from training.plant import columns as col


@pytest.mark.parametrize(
    ("prefix", "n"), [("ASKED_", col.N_ASKED), ("WANDER_", col.N_WANDERS), ("STATE_", 8)]
)
def test_columns_of_one_array_have_different_numbers(prefix: str, n: int) -> None:
    numbers = [value for name, value in vars(col).items() if name.startswith(prefix)]
    assert len(numbers) == len(set(numbers)) == n


def test_every_fault_has_a_column() -> None:
    names = ("WEAR_1", "WEAR_2", "BACKFLOW_1", "BACKFLOW_2", "STRAINER", "LEAK")
    numbers = [getattr(col, name) for name in (*names, "BEARING_1", "BEARING_2")]
    assert sorted(numbers) == list(range(col.N_FAULTS))


def test_winding_and_bearing_have_room_for_two_pumps() -> None:
    assert col.STATE_BEARING - col.STATE_WINDING == 2
    assert col.STATE_BEARING + 2 == col.N_STATE


def test_every_wander_has_a_time_constant_and_a_spread() -> None:
    assert len(col.WANDERS) == col.N_WANDERS
    assert all(tau_s > 0 and spread > 0 for tau_s, spread in col.WANDERS)
