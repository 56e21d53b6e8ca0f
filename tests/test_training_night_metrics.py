"""The night's numbers as a file for the node exporter."""

from __future__ import annotations

import subprocess
from pathlib import Path

import pytest

from tests.conftest import need_program
from training.night_metrics import FAILED, PUBLISHED, VERDICTS, night_metrics, write_metrics

ANSWERS = [("held-out density", True, -0.01), ('odd "name"\\', False, None)]
FIGURES = {"records": ("Records learned from.", 1234567.0)}


def text(verdict: str = PUBLISHED) -> str:
    return night_metrics(verdict, 1.7e9, 61.5, 1.69e9, FIGURES, ANSWERS)


def numbers(of: str) -> dict[str, float]:
    lines = [line.rpartition(" ") for line in of.splitlines() if not line.startswith("#")]
    return {name: float(value) for name, _, value in lines}


def test_exactly_one_verdict_holds() -> None:
    for verdict in VERDICTS:
        found = numbers(text(verdict))
        held = {v: found[f'oddbranch_nightly_verdict{{verdict="{v}"}}'] for v in VERDICTS}
        assert held == {v: float(v == verdict) for v in VERDICTS}


def test_numbers_come_with_their_questions_and_names_are_escaped() -> None:
    found = numbers(text())
    assert found["oddbranch_nightly_records"] == 1234567
    assert found["oddbranch_nightly_last_run_timestamp_seconds"] == 1.7e9
    assert found["oddbranch_nightly_published_timestamp_seconds"] == 1.69e9
    assert found['oddbranch_nightly_number{question="held-out density"}'] == -0.01
    assert found['oddbranch_nightly_passed{question="odd \\"name\\"\\\\"}'] == 0
    assert sum("oddbranch_nightly_number{" in name for name in found) == 1


def test_a_night_that_failed_before_a_model_has_what_there_is() -> None:
    found = numbers(night_metrics(FAILED, 1.7e9, 0.0, None, {}))
    assert "oddbranch_nightly_published_timestamp_seconds" not in found
    assert not any("question" in name for name in found)


@pytest.mark.parametrize("verdict", VERDICTS)
def test_prometheus_reads_it(verdict: str) -> None:
    program = need_program("promtool")
    done = subprocess.run(
        [program, "check", "metrics"], input=text(verdict), text=True, capture_output=True,
        check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stdout + done.stderr


def test_the_file_is_replaced_whole_and_can_be_read_by_the_exporter(tmp_path: Path) -> None:
    path = tmp_path / "collector" / "oddbranch.prom"
    path.parent.mkdir()
    write_metrics(path, "one 1\n")
    write_metrics(path, "two 2\n")
    assert path.read_text(encoding="utf-8") == "two 2\n"
    assert path.stat().st_mode & 0o777 == 0o644
    assert list(path.parent.iterdir()) == [path]


def test_no_folder_is_made_for_the_file(tmp_path: Path) -> None:
    with pytest.raises(FileNotFoundError):
        write_metrics(tmp_path / "colector" / "oddbranch.prom", "one 1\n")
    assert not list(tmp_path.iterdir())
