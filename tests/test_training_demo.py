"""The demo's command: what it makes of a proposed table, and (soak) the whole of it."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

from scoring.channels import load_channels
from training.channel_toml import ProposedChannel, write_channels
from training.demo import FIGURE_SEED, add_data_sheets
from training.demo_plant import LIVE_DAYS


def test_data_sheets_add_units_and_spans_to_a_proposed_table(tmp_path: Path) -> None:
    path = tmp_path / "channels.toml"
    proposed = [ProposedChannel("flow"), ProposedChannel("pump_1", words=("running", "stopped"))]
    path.write_text(write_channels(proposed, 60.0), encoding="utf-8")
    add_data_sheets(path)
    flow, pump = load_channels(path).instruments
    assert (flow.unit, flow.span) == ("m3/h", (0.0, 600.0))
    assert (pump.unit, pump.words) == ("", ("running", "stopped"))


def test_figures_are_published_with_a_seed_kept_for_them() -> None:
    assert FIGURE_SEED >= 9000


@pytest.mark.soak
def test_the_demo_shows_the_whole_job_and_leaves_nothing_behind(tmp_path: Path) -> None:
    words = [sys.executable, "-m", "oddbranch", "demo", "--once", "--seed", "7"]
    done = subprocess.run(
        words, capture_output=True, text=True, check=False, cwd=tmp_path, timeout=900
    )
    assert done.returncode == 0, done.stderr
    assert f"{LIVE_DAYS} live days" in done.stdout
    assert "$ oddbranch serve" in done.stdout
    assert re.search(r"^ +says +\w", done.stdout, re.M)
    assert re.search(r"^ +truth +\w", done.stdout, re.M)
    headings = re.findall(r"^(?:kind +spreads| +oddbranch) +", done.stdout, re.M)
    assert len(headings) == 2
    assert "Budget: 2 alerts a day asked for" in done.stdout
    assert "$ oddbranch drill quiet.csv" in done.stdout
    assert not list(tmp_path.iterdir())
