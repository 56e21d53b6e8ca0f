"""A pump of five channels, learned once for all tests that need a model of something real.

Speed wanders, flow, power and pressure follow it, the room does as it likes.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

from scoring.artefact import write_model
from scoring.channels import ChannelTable, parse_channels
from scoring.model import Model
from tests.spools import START_NS, spool_of
from training.history.spool import Spool
from training.learn import learn_model
from training.settings import LearnSettings

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

STEP_NS = 60_000_000_000
N_LEARNED = 3000
SOURCES = ("mill-lane", "quarry-rise")
NAMES = ("speed", "flow", "power", "pressure", "room")


def pump_table() -> ChannelTable:
    """Return the five channels, a minute apart."""
    channels = [
        {"name": "speed", "unit": "rpm", "span": [0, 2000], "resolution": 1.0},
        {"name": "flow", "unit": "m3/h", "span": [0, 500], "resolution": 0.1},
        {"name": "power", "unit": "kW", "span": [0, 100], "resolution": 0.01},
        {"name": "pressure", "unit": "bar", "span": [0, 10], "resolution": 0.001},
        {"name": "room", "unit": "degC", "span": [-20, 60], "resolution": 0.1},
    ]
    return parse_channels({"step_s": 60, "channel": channels}, "test")


def pump_values(source: str, n: int, start: int = 0) -> Floats:
    """Return n records of one source from its minute `start` on, (n, 5)."""
    rng = np.random.default_rng([SOURCES.index(source), 7])
    total = start + n
    wander = lfilter([0.2], [1.0, -0.98], rng.standard_normal(total))
    warm = lfilter([0.1], [1.0, -0.99], rng.standard_normal(total))
    noise = rng.standard_normal((total, 5))
    speed = 1300 + 80 * wander + 3 * noise[:, 0]
    own = 1.0 + 0.03 * SOURCES.index(source)
    flow = own * speed / 6 + 0.8 * noise[:, 1]
    power = own * 30 * (speed / 1300) ** 3 + 0.15 * noise[:, 2]
    pressure = 3.0 * (speed / 1300) ** 2 + 0.01 * noise[:, 3]
    room = 20 + 2 * warm + 0.1 * noise[:, 4]
    return np.column_stack([speed, flow, power, pressure, room])[start:].round(3)


def pump_times(n: int, start: int = 0) -> Ints:
    """Return the times of n records from minute `start` on."""
    return np.asarray(START_NS + STEP_NS * (start + np.arange(n, dtype=np.int64)))


def pump_spool(n: int = N_LEARNED) -> Spool:
    """Return both sources' first n records."""
    return spool_of({source: pump_values(source, n) for source in SOURCES})


@cache
def pump_model() -> Model:
    """Return the model of both sources, learned from their first records."""
    with pump_spool() as spool:
        model = learn_model(spool, pump_table(), LearnSettings()).model
    with TemporaryDirectory() as folder:
        return write_model(model, Path(folder) / "model")


def write_pump_model(folder: Path) -> Path:
    """Write the model and return its directory."""
    write_model(pump_model(), folder / "model")
    return folder / "model"


def write_csv(path: Path, records: dict[str, tuple[Ints, Floats]]) -> Path:
    """Write wide CSV of some sources' records, NaN as an empty cell."""
    lines = [",".join(("time", "source", *NAMES))]
    for source, (times_ns, values) in records.items():
        texts = np.datetime_as_string(times_ns.astype("datetime64[ns]"), unit="s")
        for text, row in zip(texts, values, strict=True):
            cells = ["" if np.isnan(x) else f"{x:.3f}" for x in row]
            lines.append(",".join((f"{text}Z", source, *cells)))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path
