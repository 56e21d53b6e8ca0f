"""A small history on disk, and the model that the command learns from it, made once."""

from __future__ import annotations

import atexit
import shutil
import tempfile
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np
from click.testing import CliRunner
from numpy.typing import NDArray

from tests.spools import START_NS
from training.learn import learn_command

Floats = NDArray[np.float64]

CHANNELS = """
format = 1
step_s = 60.0
regime = []

[[channel]]
name = "flow"
unit = "m3/h"
span = [0.0, 500.0]
resolution = 0.1

[[channel]]
name = "power"
unit = "kW"

[[channel]]
name = "temp"
unit = "degC"

[[channel]]
name = "pump"
kind = "state"
words = ["running", "stopped"]

[[derived]]
name = "temp step"
operation = "step"
of = ["temp"]
"""

HEAD = "time,source,flow,power,temp,pump\n"
# Sources and their numbers of records; the last has too few for a member of its own.
SOURCES = {"north": 420, "south": 420, "tiny": 30}


@dataclass(frozen=True)
class Plant:
    """Where things lie, and what the command said."""

    folder: Path
    channels: Path
    history: Path
    model: Path
    output: str


def records(seed: int, n: int) -> Floats:
    """Return n records of flow, power, temp and whether the pump is stopped."""
    rng = np.random.default_rng(seed)
    stopped = np.arange(n) % 60 >= 50
    flow = np.where(stopped, 0.0, 200 + 20 * rng.normal(size=n))
    power = np.where(stopped, 0.4, 0.1 * flow + 1) + 0.3 * rng.normal(size=n)
    temp = 20 + np.cumsum(rng.normal(size=n)) / 10
    return np.column_stack([np.round(flow, 1), np.round(power, 3), np.round(temp, 3), stopped])


def lines(source: str, values: Floats, first: int = 0) -> list[str]:
    """Return records as lines of a file, one a minute."""
    out = []
    for k, row in enumerate(values.tolist()):
        stamp = np.datetime64(START_NS + (first + k) * 60 * 1_000_000_000, "ns")
        cells = ["" if x != x else f"{x:g}" for x in row[:3]]
        pump = "" if row[3] != row[3] else ("stopped" if row[3] else "running")
        out.append(f"{np.datetime_as_string(stamp, unit='s')}Z,{source},{','.join(cells)},{pump}\n")
    return out


@cache
def plant() -> Plant:
    """Return the plant, learned by the command with its defaults."""
    folder = Path(tempfile.mkdtemp(prefix="oddbranch-test-plant-"))
    atexit.register(shutil.rmtree, folder, ignore_errors=True)
    channels, history, model = (folder / n for n in ("channels.toml", "history.csv", "model"))
    channels.write_text(CHANNELS, encoding="utf-8")
    text = [line for k, (s, n) in enumerate(SOURCES.items()) for line in lines(s, records(k, n))]
    history.write_text(HEAD + "".join(text), encoding="utf-8")
    words = [str(history), "--channels", str(channels), "--out", str(model)]
    result = CliRunner().invoke(learn_command, words, catch_exceptions=False)
    assert result.exit_code == 0
    return Plant(folder, channels, history, model, result.output)
