"""From outcomes to answers: what a client reads for every record it sent."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from typing import Any

import numpy as np
import orjson
from numpy.typing import NDArray

from service.engine import ALERT_WORDS, Engine
from service.layout import Layout, unpack_readings
from service.parse import Batch
from service.pipeline import CONFLICT, KNOWN, NO_ROOM, Outcome, unpack_detail
from service.problems import Problem
from service.store.states import StoredRecord
from service.store.tables import FLAG_AHEAD, FLAG_LATE, FLAG_NOT_JUDGED
from service.times import format_time, format_times

# Decimals of nats in answers; levels and alerts use the full number.
_DECIMALS = 4


def batch_answers(batch: Batch, outcome: Outcome, engine: Engine) -> list[dict[str, Any]]:
    """Return one answer an item, in the order of the body."""
    answers = record_answers(batch, outcome, engine)
    if not batch.problems and not outcome.status.any():
        return list(answers)
    found: list[dict[str, Any]] = [{}] * batch.n_items
    for row, (position, answer) in enumerate(zip(batch.positions, answers, strict=True)):
        problem = problem_of(batch, outcome, row)
        found[position] = problem.as_item(position) if problem else answer
    for position, problem in batch.problems.items():
        found[position] = problem.as_item(position)
    return found


def problem_of(batch: Batch, outcome: Outcome, row: int) -> Problem | None:
    """Return why a row that could be read was not stored, or None."""
    status = outcome.status[row]
    if status == CONFLICT:
        return Problem(
            "conflict",
            f"a record of {batch.sources[row]!r} at {format_time(int(batch.times_ns[row]))} is "
            "stored with other readings; the first one stands",
        )
    if status == NO_ROOM:
        return Problem(
            "too-many-sources",
            f"{batch.sources[row]!r} is new, and as many sources are known as limits.n_sources "
            "allows",
        )
    return None


def record_answers(batch: Batch, outcome: Outcome, engine: Engine) -> Iterator[dict[str, Any]]:
    """Yield the answer of every row."""
    scored, layout = outcome.scored, batch.layout
    names = layout.names
    missing = _missing(batch)
    reading_of = _reading_of(layout)
    suspects = scored.suspect.tolist()
    columns = np.maximum(scored.suspect, 0).astype(np.intp)
    readings = batch.values[np.arange(len(suspects)), columns].tolist()
    rows = zip(
        batch.sources,
        format_times(batch.times_ns),
        _rounded(scored.surprise),
        _rounded(scored.excess),
        _rounded(scored.sustained),
        suspects,
        _rounded(scored.suspect_surprise),
        scored.low.tolist(),
        scored.high.tolist(),
        scored.best.tolist(),
        readings,
        scored.alert.tolist(),
        strict=True,
    )
    member_of: dict[str, str] = {}
    plain = not (outcome.flags.any() or outcome.status.any() or scored.every)
    model = engine.name
    for row, (
        source, time, surprise, excess, sustained, column, own, low, high, best, reading, alert,
    ) in enumerate(rows):  # fmt: skip
        suspect = None
        if column >= 0:
            words = scored.words.get(row)
            suspect = {
                "channel": names[column],
                "surprise": own,
                "reading": reading_of(batch, row, column, reading),
                "expected": {"words": words}
                if words is not None
                else {"low": low, "high": high, "best": best},
                "neighbours": engine.neighbours(source, column),
            }
        member = member_of.get(source)
        if member is None:
            member = member_of[source] = engine.member(source)
        answer = {
            "source": source,
            "time": time,
            "model": model,
            "member": member,
            "surprise": surprise,
            "excess": excess,
            "sustained": sustained,
            "missing": missing.get(row, []),
            "unknown": batch.unknown.get(row, []),
            "suspect": suspect,
            "alert": ALERT_WORDS[alert],
        }
        if not plain:
            _add_marks(answer, outcome, row)
        yield answer


def _add_marks(answer: dict[str, Any], outcome: Outcome, row: int) -> None:
    answer["model"] = outcome.model_of.get(row, answer["model"])
    if outcome.status[row] == KNOWN:
        answer["known"] = True
    flags = int(outcome.flags[row])
    if flags & FLAG_LATE:
        answer["late"] = True
    if flags & FLAG_AHEAD:
        answer["ahead"] = True
    if flags & FLAG_NOT_JUDGED:
        answer["judged"] = False
    every = outcome.scored.every.get(row)
    if every is not None:
        answer["channels"] = every


def _missing(batch: Batch) -> dict[int, list[str]]:
    """Return the names of the channels without a usable reading, by row."""
    found: dict[int, list[str]] = {}
    absent = missing_mask(batch)
    if absent.any():
        names = batch.layout.names
        for row, column in zip(*(axis.tolist() for axis in np.nonzero(absent)), strict=True):
            found.setdefault(row, []).append(names[column])
    return found


def missing_mask(batch: Batch) -> NDArray[np.bool_]:
    """Return (n, n_channels) True where a reading is absent, bad, or outside its span."""
    absent: NDArray[np.bool_] = np.isnan(batch.values)
    if batch.layout.has_spans:
        absent |= (batch.values < batch.layout.low) | (batch.values > batch.layout.high)
    if batch.bad is not None:
        absent |= batch.bad
    return absent


def _reading_of(layout: Layout) -> Callable[[Batch, int, int, float], float | str | None]:
    if not layout.states:
        return lambda _batch, _row, _column, value: value

    def read(batch: Batch, row: int, column: int, value: float) -> float | str | None:
        if column not in layout.states:
            return value
        word = layout.reading(column, value)
        if word is None and row in batch.extra:
            unseen: str | None = batch.extra[row].get("words", {}).get(layout.names[column])
            return unseen
        return word

    return read


def _rounded(values: NDArray[np.float64]) -> list[float]:
    rounded: list[float] = np.round(values, _DECIMALS).tolist()
    return rounded


def stored_answer(
    record: StoredRecord, channels: list[dict[str, Any]], model: str
) -> dict[str, Any]:
    """Return a stored record as the pages show it: its readings and its scores."""
    extra = orjson.loads(record.extra) if record.extra else {}
    readings = unpack_readings(record.readings, extra, channels)
    quality = extra.get("quality", {})
    answer: dict[str, Any] = {
        "source": record.source,
        "time": format_time(record.time_ns),
        "received": format_time(record.received_ns),
        "request": record.request,
        "model": model,
        "readings": {
            name: {"value": value, "quality": quality[name]} if name in quality else value
            for name, value in readings.items()
        },
        "surprise": _round_or_none(record.surprise),
        "excess": _round_or_none(record.excess),
        "sustained": _round_or_none(record.sustained),
        "missing": [c["name"] for c in channels if _is_missing(c, readings, quality)],
        "suspect": None,
        "alert": ALERT_WORDS[record.alert],
    }
    if 0 <= record.suspect < len(channels):
        own, low, high, best = unpack_detail(record.suspect_detail)
        name = channels[record.suspect]["name"]
        answer["suspect"] = {
            "channel": name,
            "surprise": _round_or_none(own),
            "reading": readings.get(name),
            "expected": {"low": low, "high": high, "best": best},
        }
    for flag, name, value in (
        (FLAG_LATE, "late", True),
        (FLAG_AHEAD, "ahead", True),
        (FLAG_NOT_JUDGED, "judged", False),
    ):
        if record.flags & flag:
            answer |= {name: value}
    return answer


def _is_missing(
    channel: Mapping[str, Any], readings: Mapping[str, Any], quality: Mapping[str, str]
) -> bool:
    name, span = channel["name"], channel["span"]
    value = readings[name]
    if value is None or quality.get(name) == "bad":
        return True
    return span is not None and not isinstance(value, str) and not span[0] <= value <= span[1]


def _round_or_none(value: float | None) -> float | None:
    return None if value is None or value != value else round(value, _DECIMALS)
