"""The description of POST /records, which goes past the framework's models.

It is made from the model in use, so that it names every channel with its unit and says
exactly what is accepted.
"""

from __future__ import annotations

from typing import Any

from fastapi import FastAPI
from fastapi.openapi.utils import get_openapi
from pydantic.json_schema import models_json_schema

from service.careful import MAX_ABS_READING, MAX_NAME_CHARS, MAX_WORD_CHARS, QUALITIES
from service.layout import ChannelLike
from service.problems import KINDS
from service.running import Service
from service.schemas import ADVICE, TIME_EXAMPLE, TIME_PATTERN, ProblemBody, ProblemItem, Score

_DESCRIPTION = f"""Scores every record of a fleet's instruments and names the suspect.

{ADVICE}
"""
_NAME_PATTERN = r"^[^\u0000-\u001f\u007f]+$"
_REFUSALS = {
    "POST": (400, 401, 403, 408, 409, 413, 415, 422, 500, 503),
    "GET": (400, 401, 403, 422, 500, 503),
}


def describe(app: FastAPI, service: Service) -> dict[str, Any]:
    """Return the OpenAPI document."""
    document = get_openapi(
        title="oddbranch", version=app.version, description=_DESCRIPTION, routes=app.routes
    )
    schemas = document.setdefault("components", {}).setdefault("schemas", {})
    for name in ("HTTPValidationError", "ValidationError"):
        schemas.pop(name, None)
    _, extra = models_json_schema(
        [(model, "validation") for model in (Score, ProblemBody, ProblemItem)],
        ref_template="#/components/schemas/{model}",
    )
    schemas.update(extra["$defs"])
    channels = service.engine.layout.channels
    schemas["Record"] = _record(channels, service.settings.limits.n_readings)
    document["paths"].setdefault("/records", {})["post"] = _post(
        service.settings.limits.n_batch, channels
    )
    for name, path in document["paths"].items():
        for method, operation in path.items():
            _add_refusals(operation, method.upper(), about_one="{" in name)
    if service.tokens.are_needed:
        document["components"]["securitySchemes"] = {"token": {"type": "http", "scheme": "bearer"}}
        document["security"] = [{"token": []}]
    return document


def _add_refusals(operation: dict[str, Any], method: str, *, about_one: bool) -> None:
    responses = operation.setdefault("responses", {})
    responses.pop("422", None)
    for status in sorted((*_REFUSALS[method], *((404,) if about_one else ()))):
        kinds = [kind.title for kind in KINDS.values() if kind.status == status]
        responses[str(status)] = {
            "description": "; ".join(kinds),
            "content": {
                "application/problem+json": {"schema": {"$ref": "#/components/schemas/ProblemBody"}}
            },
        }


def _record(channels: tuple[ChannelLike, ...], n_readings: int) -> dict[str, Any]:
    return {
        "type": "object",
        "title": "Record",
        "description": "A source, a time and its readings.",
        "required": ["source", "time", "readings"],
        "additionalProperties": False,
        "properties": {
            "source": {
                "type": "string",
                "description": "name of the machine, no unit",
                "minLength": 1,
                "maxLength": MAX_NAME_CHARS,
                "pattern": _NAME_PATTERN,
                "examples": ["mill-lane-2"],
            },
            "time": {
                "type": "string",
                "description": "time of the record, RFC 3339 with an offset",
                "pattern": TIME_PATTERN,
                "maxLength": 40,
                "examples": [TIME_EXAMPLE],
            },
            "readings": {
                "type": "object",
                "description": "readings by channel, each in its channel's unit; null or absent: "
                "missing. Channels that the model does not know are named in the answer.",
                "maxProperties": n_readings,
                "propertyNames": {
                    "minLength": 1,
                    "maxLength": MAX_NAME_CHARS,
                    "pattern": _NAME_PATTERN,
                },
                "properties": {channel.name: _reading(channel) for channel in channels},
                "additionalProperties": {
                    "description": "a channel that the model does not know, its own unit",
                    "anyOf": _with_quality([_NUMBER, _WORD]),
                },
                "examples": [_example_readings(channels)],
            },
        },
        "examples": [_example(channels)],
    }


_NUMBER = {"type": "number", "minimum": -MAX_ABS_READING, "maximum": MAX_ABS_READING}
_WORD = {"type": "string", "maxLength": MAX_WORD_CHARS}
_QUALITY = {
    "type": "string",
    "enum": list(QUALITIES),
    "description": "quality by the OPC UA words, no unit; bad counts as missing",
    "examples": ["good"],
}


def _with_quality(values: list[dict[str, Any]]) -> list[dict[str, Any]]:
    plain = [*values, {"type": "null"}]
    marked = {
        "type": "object",
        "required": ["value"],
        "additionalProperties": False,
        "properties": {
            "value": {"anyOf": plain, "description": "the reading, the channel's unit"},
            "quality": _QUALITY,
        },
    }
    return [*plain, marked]


def _reading(channel: ChannelLike) -> dict[str, Any]:
    is_state = channel.kind == "state"
    unit = "no unit" if is_state or not channel.unit else f"unit {channel.unit}"
    words = f"; words: {', '.join(channel.words)}" if is_state else ""
    return {
        "description": f"{channel.kind}, {unit}{words}",
        "anyOf": _with_quality([_WORD if is_state else _NUMBER]),
        "examples": [_example_reading(channel)],
    }


def _example_reading(channel: ChannelLike) -> float | str:
    if channel.kind == "state":
        return channel.words[0]
    if channel.span is not None:
        return round((channel.span[0] + channel.span[1]) / 2, 3)
    return 1.5


def _example_readings(channels: tuple[ChannelLike, ...]) -> dict[str, float | str]:
    return {channel.name: _example_reading(channel) for channel in channels[:4]}


def _example(channels: tuple[ChannelLike, ...]) -> dict[str, Any]:
    return {
        "source": "mill-lane-2",
        "time": TIME_EXAMPLE,
        "readings": _example_readings(channels),
    }


def _post(n_batch: int, channels: tuple[ChannelLike, ...]) -> dict[str, Any]:
    record = {"$ref": "#/components/schemas/Record"}
    score = {"$ref": "#/components/schemas/Score"}
    anything = {"description": "anything else is answered with a problem in its place"}
    items = {"anyOf": [record, anything]}
    item = {"anyOf": [score, {"$ref": "#/components/schemas/ProblemItem"}]}
    return {
        "summary": "Store and score records",
        "description": "One record, an array, or lines of NDJSON, answered in kind and in order "
        "once they are on disk. In an array or a stream a record that is refused is a problem in "
        "its place and harms no other. The same record again is answered as known.",
        "operationId": "post_records",
        "parameters": [
            {
                "name": "channels",
                "in": "query",
                "required": False,
                "description": "also answer every channel's surprise (nats) and expected interval",
                "schema": {"type": "boolean", "default": False},
                "example": False,
            }
        ],
        "requestBody": {
            "required": True,
            "content": {
                "application/json": {
                    "schema": {
                        "anyOf": [record, {"type": "array", "items": items, "maxItems": n_batch}]
                    },
                    "example": _example(channels),
                },
                "application/x-ndjson": {"schema": {"type": "string"}},
            },
        },
        "responses": {
            "200": {
                "description": "Stored and scored",
                "content": {
                    "application/json": {
                        "schema": {"anyOf": [score, {"type": "array", "items": item}]}
                    },
                    "application/x-ndjson": {"schema": {"type": "string"}},
                },
            }
        },
    }
