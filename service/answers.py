"""From outcomes to answers: what a client reads for every record it sent."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import orjson

from service.engine import ALERT_WORDS
from service.layout import unpack_readings
from service.parse import Batch
from service.pipeline import Outcome, unpack_detail
from service.problems import Problem
from service.sheet import CONFLICT, DECIMALS, KNOWN, NO_ROOM, Sheet
from service.store.states import StoredRecord
from service.store.tables import FLAG_AHEAD, FLAG_LATE, FLAG_NOT_JUDGED
from service.times import format_time


def batch_answers(batch: Batch, outcome: Outcome) -> list[dict[str, Any]]:
    """Return one answer an item, in the order of the body."""
    answers = record_answers(outcome)
    sheet = outcome.sheet
    if not batch.problems and sheet.is_plain:
        return answers
    found: list[dict[str, Any]] = [{}] * batch.n_items
    for row, (position, answer) in enumerate(zip(batch.positions, answers, strict=True)):
        problem = problem_of(outcome, row)
        found[position] = problem.as_item(position) if problem else answer
    for position, problem in batch.problems.items():
        found[position] = problem.as_item(position)
    return found


def problem_of(outcome: Outcome, row: int) -> Problem | None:
    """Return why a row that could be read was not stored, or None. row: in the batch."""
    sheet, row = outcome.sheet, outcome.start + row
    status = sheet.status[row]
    if status == CONFLICT:
        return Problem(
            "conflict",
            f"a record of {sheet.sources[row]!r} at {format_time(int(sheet.times_ns[row]))} is "
            "stored with other readings; the first one stands",
        )
    if status == NO_ROOM:
        return Problem(
            "too-many-sources",
            f"{sheet.sources[row]!r} is new, and as many sources are known as limits.n_sources "
            "allows",
        )
    return None


def record_answers(outcome: Outcome) -> list[dict[str, Any]]:
    """Return the answer of every row of a batch."""
    sheet, first, stop = outcome.sheet, outcome.start, outcome.stop
    engine, names, missing, unknown = (
        sheet.engine, sheet.engine.layout.names, sheet.missing, sheet.unknown
    )  # fmt: skip
    member_of: dict[str, str] = {}
    near: dict[tuple[str, int], Sequence[str]] = {}
    model, words, states = engine.name, sheet.scored.words, engine.layout.states
    answers = []
    for row, source, cells in zip(
        range(first, stop), sheet.sources[first:stop], sheet.cells[first:stop], strict=True
    ):
        time, surprise, excess, sustained, own, low, high, best, reading, column, alert = cells
        suspect = None
        if column >= 0:
            place = source, column
            beside = near.get(place)
            if beside is None:
                beside = near[place] = engine.neighbours(source, column)
            suspect = {
                "channel": names[column],
                "surprise": own,
                "reading": _word(sheet, row, column, reading) if column in states else reading,
                "expected": {"words": words[row]}
                if row in words
                else {"low": low, "high": high, "best": best},
                "neighbours": beside,
            }
        member = member_of.get(source)
        if member is None:
            member = member_of[source] = engine.member(source)
        answers.append({
            "source": source,
            "time": time,
            "model": model,
            "member": member,
            "surprise": surprise,
            "excess": excess,
            "sustained": sustained,
            "missing": missing.get(row, _NONE),
            "unknown": unknown.get(row, _NONE),
            "suspect": suspect,
            "alert": ALERT_WORDS[alert],
        })  # fmt: skip
    if not sheet.is_plain:
        for row, answer in zip(range(first, stop), answers, strict=True):
            _add_marks(answer, sheet, row)
    return answers


_NONE: list[str] = []


def _word(sheet: Sheet, row: int, column: int, value: float) -> float | str | None:
    layout = sheet.engine.layout
    word = layout.reading(column, value)
    if word is None and row in sheet.extra:
        unseen: str | None = sheet.extra[row].get("words", {}).get(layout.names[column])
        return unseen
    return word


def _add_marks(answer: dict[str, Any], sheet: Sheet, row: int) -> None:
    answer["model"] = sheet.model_of.get(row, answer["model"])
    if sheet.status[row] == KNOWN:
        answer["known"] = True
    flags = int(sheet.flags[row])
    if flags & FLAG_LATE:
        answer["late"] = True
    if flags & FLAG_AHEAD:
        answer["ahead"] = True
    if flags & FLAG_NOT_JUDGED:
        answer["judged"] = False
    every = sheet.scored.every.get(row)
    if every is not None:
        answer["channels"] = every


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
        detail = unpack_detail(record.suspect_detail)
        name = channels[record.suspect]["name"]
        answer["suspect"] = {
            "channel": name,
            "surprise": _round_or_none(detail.surprise),
            "reading": readings.get(name),
            "expected": {"low": detail.low, "high": detail.high, "best": detail.best}
            if detail.words is None
            else {"words": detail.words},
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
    return None if value is None or value != value else round(value, DECIMALS) + 0.0
