"""Liveness, readiness, metrics, and what each sort of refusal means."""

from __future__ import annotations

import asyncio

import orjson
from fastapi import APIRouter, Response
from prometheus_client import generate_latest

from service.problems import KINDS, Problem
from service.running import Service
from service.schemas import Health

_PROMETHEUS_TEXT = "text/plain; version=0.0.4; charset=utf-8"
# Longer than a pause of a busy writer, shorter than a probe's patience of some seconds.
_PING_S = 2.0


def health_router(service: Service) -> APIRouter:
    """Return the routes that machines watch."""
    router = APIRouter()

    @router.get("/health/live", responses={200: {"model": Health}}, summary="Does it live")
    async def live() -> Response:
        """Answer 200 while the event loop turns and the writer's thread runs."""
        if not service.writer.alive:
            raise Problem("internal", "the writer has ended")
        return _answer({"status": "live"})

    @router.get("/health/ready", responses={200: {"model": Health}}, summary="Can it take records")
    async def ready() -> Response:
        """Answer 200 while the store answers and a model is loaded."""
        try:
            async with asyncio.timeout(_PING_S):
                await asyncio.to_thread(service.database.ping)
        except Exception:  # noqa: BLE001 - whatever keeps the store from answering
            raise Problem("not-ready", "the store does not answer") from None
        return _answer(
            {
                "status": "ready",
                "model": service.engine.name,
                "model_refused": service.models.refusal and "see the log of the service",
            }
        )

    @router.get(
        "/metrics",
        response_class=Response,
        responses={200: {"content": {"text/plain": {"schema": {"type": "string"}}}}},
        summary="Numbers for Prometheus",
    )
    async def metrics() -> Response:
        """Answer the numbers in Prometheus text."""
        text = await asyncio.to_thread(generate_latest, service.metrics.registry)
        return Response(text, media_type=_PROMETHEUS_TEXT)

    @router.get("/problems/{kind}", include_in_schema=False)
    async def problem(kind: str) -> Response:
        """Explain one sort of refusal."""
        found = KINDS.get(kind)
        if found is None:
            raise Problem("not-found", "there is no such sort of refusal")
        text = f"{found.title} (status {found.status})\n\n{found.way_out}\n"
        return Response(text, media_type="text/plain")

    return router


def _answer(body: dict[str, object]) -> Response:
    return Response(orjson.dumps(body), media_type="application/json")
