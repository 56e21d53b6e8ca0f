"""Delays that make no sense are refused by name."""

from __future__ import annotations

import pytest
from pydantic import ValidationError

from scoring.delays import DELAYS, Delays


def test_left_alone_they_are_the_defaults() -> None:
    assert Delays() == DELAYS
    assert Delays(deadband=0.2) != DELAYS


@pytest.mark.parametrize(
    "wrong", [{"record_run": 0}, {"deadband": 1.0}, {"off_delay_steps": -1}, {"unknown": 1}]
)
def test_delays_that_make_no_sense_are_refused(wrong: dict[str, float]) -> None:
    with pytest.raises(ValidationError, match=next(iter(wrong))):
        Delays(**wrong)
