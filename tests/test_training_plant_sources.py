"""Compiled code belongs to one state of the sources."""

from __future__ import annotations

from pathlib import Path

from training.plant import severity, station
from training.plant.sources import SOURCES, fingerprint
from training.plant.utility import build_stations


def test_any_change_of_a_source_changes_the_fingerprint(tmp_path: Path) -> None:
    (tmp_path / "a.py").write_text("x = 1\n")
    before = fingerprint(tmp_path)
    (tmp_path / "a.py").write_text("x = 2\n")
    changed = fingerprint(tmp_path)
    (tmp_path / "b.py").write_text("")
    assert len({before, changed, fingerprint(tmp_path)}) == 3


def test_the_compiled_loop_is_looked_up_by_the_fingerprint() -> None:
    severity.settled(build_stations(1, 1)[0].physics, "leak", 0, 0.0)
    signatures = station.run_station.signatures
    assert signatures
    assert all(f"default={SOURCES!r}" in str(s[-1]) for s in signatures)
