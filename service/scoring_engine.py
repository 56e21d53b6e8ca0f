"""An `Engine` over `scoring`: the only module here that knows how a record is scored."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scoring.alert_settings import AlertSettings
from scoring.artefact import read_model
from scoring.episodes import Episodes
from scoring.model import Member, Model
from scoring.scorer import Scorer, Scores
from scoring.standing import BadStanding, Standing
from service.engine import Floats, Scored
from service.layout import Layout

# Neighbours are asked for with every answer and cost a walk over the tree.
_N_CACHED_NEIGHBOURS = 4096


class ScoringEngine:
    """One loaded model with its kernels compiled. alerts: what a site set of them."""

    def __init__(self, model: Model, alerts: AlertSettings | None = None) -> None:
        self.model = model
        self.name = model.name
        self.layout = Layout(tuple(model.table.instruments))
        self.levels: Mapping[str, float] = {
            "record": model.levels.record,
            "sustained": model.levels.sustained,
        }
        self.figures: Mapping[str, float] = _figures(model)
        self._scorer = Scorer(model)
        self._scorer.warm()
        self.episodes: Episodes | None = Episodes(self._scorer, alerts)
        self.episodes.warm()
        # Made of the model alone: a cache that leads back here would keep this from being freed.
        self._neighbours = lru_cache(maxsize=_N_CACHED_NEIGHBOURS)(model.beside)

    def score(
        self,
        sources: Sequence[str],
        start: NDArray[np.int64],
        times_ns: NDArray[np.int64],
        values: Floats,
        lives: Sequence[Standing | None],
        channels: bool,
    ) -> tuple[Scored, list[Standing]]:
        """Score records of some sources; see `Engine`."""
        scores, standings = self._scorer.score_runs(sources, start, times_ns, values, lives)
        scored = Scored(
            surprise=scores.surprise,
            excess=scores.excess,
            sustained=scores.sustained,
            suspect=scores.suspect,
            suspect_surprise=scores.suspect_surprise,
            low=scores.expected_low,
            high=scores.expected_high,
            best=scores.expected_best,
            alert=scores.alert,
            judged=scores.judged,
            scores=scores,
        )
        if self.layout.states or channels:
            for source, first, stop in zip(sources, start[:-1], start[1:], strict=True):
                rows = range(int(first), int(stop))
                if self.layout.states:
                    self._add_words(source, scores, rows, scored)
                if channels:
                    scored.every |= {r: self._every_channel(source, scores, r) for r in rows}
        return scored, standings

    def _add_words(self, source: str, scores: Scores, rows: range, scored: Scored) -> None:
        for row, suspect in zip(rows, scores.suspect[rows.start : rows.stop].tolist(), strict=True):
            if suspect in self.layout.states:
                expected = self._scorer.expected(source, scores.rows[row], suspect)
                scored.words[row] = _rounded(expected.words or {})

    def _every_channel(self, source: str, scores: Scores, row: int) -> list[dict[str, Any]]:
        found = []
        for column, name in enumerate(self.layout.names):
            expected = self._scorer.expected(source, scores.rows[row], column)
            surprise = float(scores.channel_surprise[row, column])
            entry: dict[str, Any] = {
                "channel": name,
                "surprise": None if math.isnan(surprise) else round(surprise, 4),
            }
            if expected.words is not None:
                entry["expected"] = {"words": _rounded(expected.words)}
            else:
                entry["expected"] = {
                    "low": _finite_or_none(expected.low),
                    "high": _finite_or_none(expected.high),
                    "best": _finite_or_none(expected.best),
                }
            found.append(entry)
        return found

    def standing_from(self, stored: bytes | None) -> Standing | None:
        """Return a stored standing where it belongs to this model and can be read."""
        if not stored:
            return None
        try:
            standing = Standing.from_bytes(stored)
        except BadStanding:
            return None
        return standing if standing.model == self.name else None

    def standing_bytes(self, live: Standing) -> bytes:
        """Return a standing as the store keeps it."""
        return live.to_bytes()

    def neighbours(self, source: str, column: int) -> Sequence[str]:
        """Return the names of the channels that share an edge with one."""
        return self._neighbours(source if source in self.model.members else "", column)

    def member(self, source: str) -> str:
        """Return `own` where the model has a member for the source, else `fleet`."""
        return "own" if source in self.model.members else "fleet"

    def describe(self, source: str | None) -> dict[str, Any]:
        """Return the model as its page shows it."""
        member = self.model.member(source) if source is not None else self.model.fleet
        levels = self.model.levels
        return {
            "model": self.name,
            "source": source,
            "member": "own" if source in self.model.members else "fleet",
            "members": sorted(self.model.members),
            "levels": dict(self.levels),
            "least_readings": levels.least_readings,
            "tau_s": levels.tau_s,
            "step_s": levels.step_s,
            "channels": self.layout.as_json(),
            "edges": _edges(self.model, member),
            "about": {**self.model.about, **member.about},
        }


def load_engine(path: Path, alerts: AlertSettings | None = None) -> ScoringEngine:
    """Return the model of a directory, ready to score; raises BadArtefact."""
    return ScoringEngine(read_model(path), alerts)


def _figures(model: Model) -> dict[str, float]:
    """Return what the model says of itself; a figure it does not have is left out."""
    about = model.about
    figures = {"model_members": float(len(model.members))}
    for name, key, scale in (
        ("model_history_records", "n_records", 1.0),
        ("model_history_end_timestamp_seconds", "last_ns", 1e-9),
        ("alarm_budget_alerts_per_day", "alerts_per_day", 1.0),
    ):
        if about.get(key) is not None:
            figures[name] = about[key] * scale
    held_out = [
        (member.about["held_out_records"], member.about["held_out_surprise"])
        for member in model.members.values()
        if member.about.get("held_out_records")
    ]
    if held_out:
        n_records = sum(n for n, _ in held_out)
        figures["model_held_out_surprise_nats"] = sum(n * x for n, x in held_out) / n_records
    return figures


def _edges(model: Model, member: Member) -> list[dict[str, Any]]:
    names = model.table.names
    return [
        {"left": names[int(left)], "right": names[int(right)], "nats": round(float(nats), 4)}
        for part in member.parts
        for (left, right), nats in zip(part.tree.edges, part.tree.nats, strict=True)
    ]


def _finite_or_none(value: float) -> float | None:
    return value if math.isfinite(value) else None


def _rounded(words: Mapping[str, float]) -> dict[str, float]:
    return {word: round(probability, 4) for word, probability in words.items()}
