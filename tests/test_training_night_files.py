"""Reports appear whole, are read back by the next night, and old ones go."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from training.night_files import NightFiles

NIGHT = datetime(2026, 12, 1, 2, 15, tzinfo=UTC)


def shown(files: NightFiles, night: int, **data: object) -> Path:
    return files.show(
        files.prepare(NIGHT + timedelta(days=night), "refused", f"<p>{night}</p>", {**data})
    )


def test_a_night_appears_when_it_is_shown(tmp_path: Path) -> None:
    files = NightFiles(tmp_path / "nightly")
    name = files.prepare(NIGHT, "published", "<p>page</p>", {"x": 1.5})
    assert name == "20261201T021500Z-published"
    assert files.names() == []
    page = files.show(name)
    assert page.read_text(encoding="utf-8") == "<p>page</p>"
    assert files.names() == [name]
    assert (tmp_path / "nightly" / f"{name}.json").read_text(
        encoding="utf-8"
    ) == '{\n "x": 1.5\n}\n'


def test_what_a_dead_job_left_is_cleared(tmp_path: Path) -> None:
    files = NightFiles(tmp_path)
    files.prepare(NIGHT, "published", "<p>dead</p>", {})
    shown(files, 1)
    assert sorted(p.suffix for p in tmp_path.iterdir()) == [".html", ".json"]


def test_the_last_share_left_out_is_that_of_the_last_night_that_learned(tmp_path: Path) -> None:
    files = NightFiles(tmp_path)
    assert files.last_left_out() is None
    shown(files, 0, left_out_share=0.25)
    shown(files, 1)
    (tmp_path / "20261203T021500Z-refused.json").write_text("{", encoding="utf-8")
    assert files.last_left_out() == 0.25
    shown(files, 4, left_out_share=0.5)
    assert files.last_left_out() == 0.5


def test_old_nights_go(tmp_path: Path) -> None:
    files = NightFiles(tmp_path)
    for night in range(4):
        shown(files, night)
    files.prune(2)
    assert files.names() == ["20261203T021500Z-refused", "20261204T021500Z-refused"]
    assert len(list(tmp_path.iterdir())) == 4


def test_numbers_that_are_none_are_no_data(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="not JSON compliant"):
        NightFiles(tmp_path).prepare(NIGHT, "refused", "", {"x": float("nan")})
