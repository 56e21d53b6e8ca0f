"""A small stand-in for a model, so that tests of the service need no learning.

Its scores are simple and depend on the order of records, so that a lost or doubled
record shows in a standing.
"""

from __future__ import annotations

import struct
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from scoring.episodes import Episodes
from scoring.errors import BadArtefact
from service.engine import Floats, Scored
from service.layout import Layout


@dataclass(frozen=True)
class FakeChannel:
    """A channel with what a parser needs."""

    name: str
    unit: str = ""
    kind: Literal["measurement", "state"] = "measurement"
    span: tuple[float, float] | None = None
    words: tuple[str, ...] = ()


CHANNELS = (
    FakeChannel("flow", "m3/h", span=(0.0, 400.0)),
    FakeChannel("power", "kW"),
    FakeChannel("pump", kind="state", words=("running", "stopped")),
    FakeChannel("speed", "1/min"),
)
N_WIDE = 24
WIDE_CHANNELS = tuple(FakeChannel(f"channel_{i:02d}", "bar") for i in range(N_WIDE))


@dataclass(frozen=True)
class FakeStanding:
    """How many records came, and a sum that depends on their order."""

    model: str
    n_records: int = 0
    mixed: int = 0
    sustained: float = 0.0


class FakeEngine:
    """Surprise is the first reading over ten; sustained a running mean."""

    def __init__(
        self, name: str = "0123456789abcdef", channels: tuple[FakeChannel, ...] = CHANNELS
    ) -> None:
        self.name = name
        self.layout = Layout(channels)
        self.levels: Mapping[str, float] = {"record": 30.0, "sustained": 20.0}
        self.figures: Mapping[str, float] = {"alarm_budget_alerts_per_day": 2.0}
        self.fail_on: str | None = None
        self.episodes: Episodes | None = None

    def score(
        self,
        sources: Sequence[str],
        start: NDArray[np.int64],
        times_ns: NDArray[np.int64],
        values: Floats,
        lives: Sequence[FakeStanding | None],
        channels: bool,
    ) -> tuple[Scored, list[FakeStanding]]:
        scored, standings = Scored.empty(len(times_ns)), []
        for source, live, first, stop in zip(sources, lives, start[:-1], start[1:], strict=True):
            at = slice(int(first), int(stop))
            some, after = self._score_one(source, times_ns[at], values[at], live, channels)
            scored.put(at, some, range(at.start, at.stop))
            standings.append(after)
        return scored, standings

    def _score_one(
        self,
        source: str,
        times_ns: NDArray[np.int64],
        used: Floats,
        live: FakeStanding | None,
        channels: bool,
    ) -> tuple[Scored, FakeStanding]:
        if source == self.fail_on:
            raise RuntimeError("the stand-in was told to fail")
        standing = live or FakeStanding(self.name)
        n = len(times_ns)
        scored = Scored.empty(n)
        surprise = np.nan_to_num(used[:, 0], nan=0.0) / 10
        scored.surprise = surprise
        scored.judged = np.array(np.isfinite(used).any(axis=1), dtype=np.bool_)
        scored.excess = np.where(scored.judged, surprise - 1.0, np.nan)
        scored.suspect = np.where(np.isnan(used[:, 0]), -1, 0).astype(np.int16)
        scored.suspect_surprise = surprise / 2
        scored.low = used[:, 0] + 1.0
        scored.best = used[:, 0] + 2.0
        mixed, sustained = standing.mixed, standing.sustained
        for row in range(n):
            mixed = (mixed * 31 + int(times_ns[row]) % 1_000_003 + 7) % (1 << 62)
            step = scored.excess[row] if scored.judged[row] else 0.0
            sustained += 0.1 * (min(step, 30.0) - sustained)
            scored.sustained[row] = sustained
        if 2 in self.layout.states:
            # A word never seen is the suspect, so that a state is one at times.
            for row in np.flatnonzero(used[:, 2] == 2).tolist():
                scored.suspect[row] = 2
                scored.low[row] = scored.best[row] = np.nan
                scored.words[row] = {"running": 0.75, "stopped": 0.25}
        over = scored.judged & (scored.excess > self.levels["record"])
        scored.alert = np.where(over, 1, 0).astype(np.uint8)
        if channels:
            for row in range(n):
                scored.every[row] = [
                    {"channel": name, "surprise": 0.5,
                     "expected": {"low": None, "high": None, "best": 1.0}}
                    for name in self.layout.names
                ]  # fmt: skip
        return scored, FakeStanding(self.name, standing.n_records + n, mixed, sustained)

    def standing_from(self, stored: bytes | None) -> FakeStanding | None:
        if not stored:
            return None
        n_records, mixed, sustained = struct.unpack_from("<qqd", stored)
        model = stored[24:].decode()
        return FakeStanding(model, n_records, mixed, sustained) if model == self.name else None

    def standing_bytes(self, live: FakeStanding) -> bytes:
        head = struct.pack("<qqd", live.n_records, live.mixed, live.sustained)
        return head + live.model.encode()

    def neighbours(self, source: str, column: int) -> Sequence[str]:
        return ("power",)

    def member(self, source: str) -> str:
        return "own" if source.startswith("mill") else "fleet"

    def describe(self, source: str | None) -> dict[str, Any]:
        return {
            "model": self.name,
            "source": source,
            "member": self.member(source or ""),
            "members": ["mill-lane-1"],
            "levels": dict(self.levels),
            "channels": self.layout.as_json(),
            "edges": [{"left": "flow", "right": "power", "nats": 1.2}],
        }


def load_fake(path: Path) -> FakeEngine:
    """Load a stand-in: a directory whose model.json holds its name, and `wide` for 24 channels."""
    try:
        words = (path / "model.json").read_text(encoding="utf-8").split()
    except OSError:
        raise BadArtefact(str(path), "no model.json in it") from None
    if not words or words[0] == "broken":
        raise BadArtefact(str(path), "the checksum of tables.npz is wrong")
    return FakeEngine(words[0], WIDE_CHANNELS if "wide" in words else CHANNELS)


def write_fake(path: Path, text: str = "0123456789abcdef") -> Path:
    """Write the directory of a stand-in, by rename as the real one is."""
    path.mkdir(parents=True, exist_ok=True)
    aside = path / "model.json.new"
    aside.write_text(text, encoding="utf-8")
    aside.rename(path / "model.json")
    return path
