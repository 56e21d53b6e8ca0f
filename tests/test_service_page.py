"""What the page says of a suspect, as far as no browser is needed."""

from __future__ import annotations

from typing import Any

import pytest

from service.page import _suspect


@pytest.mark.parametrize(
    ("fields", "text"),
    [
        ({}, "it read 241.3, 268 to 281 was expected"),
        ({"reading": 270.0}, "it read 270, which is odd"),
        ({"expected": {"low": None, "high": 281.0, "best": 270.0}}, "it read 241.3"),
        ({"reading": "on", "expected": {"words": {"off": 0.9, "on": 0.1}}}, "on, off was expected"),
    ],
)
def test_a_suspect_reads_beside_what_was_expected(fields: dict[str, Any], text: str) -> None:
    expected = {"low": 268.0, "high": 281.0, "best": 274.0}
    plain = {"channel": "flow", "reading": 241.3, "expected": expected}
    assert _suspect(plain | fields).endswith(text)
    assert _suspect(None) == ""
