"""One line per stage, also of one that fails."""

from __future__ import annotations

import re

import pytest

from training.stages import Stages


def test_a_stage_is_one_line_with_what_was_said_and_how_long_it_took() -> None:
    lines: list[str] = []
    stages = Stages(lines.append)
    with stages.stage("reading") as said:
        said += ["5 records", "2 sources"]
    with stages.stage("judging"):
        pass
    assert re.fullmatch(r"reading: 5 records, 2 sources, \d+\.\d s", lines[0])
    assert re.fullmatch(r"judging: \d+\.\d s", lines[1])
    assert stages.total_s >= 0.0


def test_a_stage_that_fails_says_so() -> None:
    lines: list[str] = []
    with pytest.raises(ValueError, match="broken"), Stages(lines.append).stage("learning"):
        raise ValueError("broken")
    assert re.fullmatch(r"learning: ended early after \d+\.\d s", lines[0])
