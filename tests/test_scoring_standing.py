"""A standing's bytes: there and back, and nothing else is taken for one."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from scoring.derived import Carry
from scoring.standing import STANDING_FORMAT, BadStanding, Standing
from tests.strategies import SOME

TIMES = st.integers(-(2**63), 2**63 - 1)
VALUES = arrays(np.float64, st.integers(1, 5), elements=st.floats(allow_nan=True))
STANDINGS = st.builds(
    Standing,
    model=st.text("0123456789abcdef", min_size=16, max_size=16),
    time_ns=TIMES,
    sustained=st.floats(allow_nan=False, allow_infinity=False),
    carry=st.one_of(st.none(), st.builds(Carry, time_ns=TIMES, values=VALUES)),
)


@SOME
@given(STANDINGS)
def test_bytes_give_the_same_standing(standing: Standing) -> None:
    back = Standing.from_bytes(standing.to_bytes())
    assert (back.model, back.time_ns, back.sustained) == (
        *(standing.model, standing.time_ns, standing.sustained),
    )
    assert (back.carry is None) == (standing.carry is None)
    if back.carry is not None and standing.carry is not None:
        assert back.carry.time_ns == standing.carry.time_ns
        np.testing.assert_array_equal(back.carry.values, standing.carry.values)
    assert back.to_bytes() == standing.to_bytes()


WHOLE = Standing("0123456789abcdef", 5, 1.5, Carry(4, np.array([1.0, 2.0]))).to_bytes()


@pytest.mark.parametrize(
    ("data", "says"),
    [
        (b"", "format none was met; this version reads format 1"),
        (bytes([STANDING_FORMAT + 1]) + WHOLE[1:], "format 2 was met; this version reads format 1"),
        (WHOLE[:10], "a standing"),
        (WHOLE[:-1], f"a standing of {len(WHOLE) - 1} bytes is not whole"),
        (WHOLE + b"x", f"a standing of {len(WHOLE) + 1} bytes is not whole"),
    ],
)
def test_other_bytes_are_refused(data: bytes, says: str) -> None:
    with pytest.raises(BadStanding, match=says):
        Standing.from_bytes(data)
