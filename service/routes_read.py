"""The pages: records, sources, the model, what was pruned."""

# No postponed annotations here: the framework reads them, and they hold values of this app.

import asyncio
import re
from collections.abc import AsyncIterator, Callable
from functools import partial
from typing import Annotated, Any, TypeVar

import orjson
import sqlalchemy as sa
from fastapi import APIRouter, Depends, Header, Query, Request, Response
from fastapi.routing import APIRoute
from starlette.responses import StreamingResponse

from service.answers import stored_answer
from service.engine import ALERT_WORDS
from service.nearest import nearest_of
from service.problems import Problem
from service.running import Service
from service.schemas import (
    TIME_EXAMPLE,
    TIME_PATTERN,
    ModelPage,
    PrunedPage,
    RecordsPage,
    SourcesPage,
)
from service.store import pages
from service.store.states import StoredRecord
from service.times import format_time, parse_time

T = TypeVar("T")

SourceQuery = Annotated[
    str | None,
    Query(
        description="name of the source, no unit",
        examples=["mill-lane-2"],
        min_length=1,
        max_length=200,
        pattern=r"^[^\u0000-\u001f\u007f]+$",
    ),
]
_TIME_SCHEMA = {"pattern": TIME_PATTERN, "maxLength": 40}
FromQuery = Annotated[
    str | None,
    Query(
        alias="from",
        description="first time, RFC 3339 with offset",
        examples=[TIME_EXAMPLE],
        json_schema_extra=_TIME_SCHEMA,
    ),
]
ToQuery = Annotated[
    str | None,
    Query(
        alias="to",
        description="time after the last, RFC 3339 with offset",
        examples=["2026-12-02T00:00:00Z"],
        json_schema_extra=_TIME_SCHEMA,
    ),
]
# Two numbers of the last item: no more than a place in an order, and nothing secret.
# The second is a time in nanoseconds or nothing, and fits in 63 bits.
_PAIR_TEXT = r"([0-9]{1,18})-(9[01][0-9]{17}|[0-8]?[0-9]{1,18})"
_PAIR = re.compile(_PAIR_TEXT, re.ASCII)
AfterQuery = Annotated[
    str | None,
    Query(
        description="`next` of the page before, no unit",
        examples=["1-1796097600000000000"],
        json_schema_extra={"pattern": f"^{_PAIR_TEXT}$"},
    ),
]


def refuse_unknown(request: Request) -> None:
    """Refuse a parameter that is not known: a misspelt one would choose everything."""
    route = request.scope["route"]
    assert isinstance(route, APIRoute)
    known = [field.alias for field in route.dependant.query_params]
    for name in request.query_params:
        if name not in known:
            near = nearest_of(name, known)
            hint = f"; is {near} meant?" if near else f"; known are {', '.join(known)}"
            raise Problem("bad-query", f"parameter {name[:60]!r} is not known here{hint}")


def read_router(service: Service) -> APIRouter:
    """Return the routes that read the store and the model."""
    router = APIRouter(dependencies=[Depends(refuse_unknown)])
    n_page = service.settings.limits.n_page
    limit_query = Query(description="items at most, count", ge=1, le=n_page, examples=[100])
    layouts = _Layouts()

    async def in_thread(read: Callable[[sa.Connection], T]) -> T:
        def run() -> T:
            with service.database.read.connect() as connection:
                return read(connection)

        return await asyncio.to_thread(run)

    @router.get(
        "/records",
        responses=_page(RecordsPage) | {200: {
            "model": RecordsPage,
            "content": {"application/x-ndjson": {"schema": {"type": "string"}}},
        }},
        summary="Stored records by source and time",
    )  # fmt: skip
    async def records(
        source: SourceQuery = None,
        from_: FromQuery = None,
        to: ToQuery = None,
        limit: Annotated[int, limit_query] = 100,
        after: AfterQuery = None,
        newest: Annotated[
            bool, Query(description="newest first, no unit", examples=[True])
        ] = False,
        accept: Annotated[str | None, Header(include_in_schema=False)] = None,
    ) -> Response:
        """Answer stored records with their readings and scores.

        With `Accept: application/x-ndjson` all of them come, a line each, and `limit`
        is how many are read at a time.
        """
        bounds = time_of("from", from_), time_of("to", to)

        def read(
            connection: sa.Connection, *, at: tuple[int, int] | None
        ) -> tuple[list[dict[str, Any]], tuple[int, int] | None]:
            found, following = pages.records_page(
                connection, source=source, from_ns=bounds[0], to_ns=bounds[1],
                newest_first=newest, limit=limit, after=at,
            )  # fmt: skip
            return layouts.answers(connection, found), following

        at = pair_of(after)
        if accept is not None and "application/x-ndjson" in accept:

            async def lines() -> AsyncIterator[bytes]:
                place = at
                while True:
                    items, place = await in_thread(partial(read, at=place))
                    yield b"".join(
                        orjson.dumps(item, option=orjson.OPT_APPEND_NEWLINE) for item in items
                    )
                    if place is None:
                        return

            return StreamingResponse(lines(), media_type="application/x-ndjson")
        items, following = await in_thread(partial(read, at=at))
        return answer({"items": items, "next": cursor_of(following)})

    @router.get("/sources", responses=_page(SourcesPage), summary="Sources and their standing")
    async def sources(
        limit: Annotated[int, limit_query] = 100, after: SourceQuery = None
    ) -> Response:
        """Answer every source by name; `after` is the name of the last one seen."""
        rows, following = await in_thread(lambda c: pages.sources_page(c, limit=limit, after=after))
        items = [source_item(row, service) for row in rows]
        return answer({"items": items, "next": following})

    @router.get("/model", responses=_page(ModelPage), summary="The model in use")
    async def model(source: SourceQuery = None) -> Response:
        """Answer the model as it is for one source, or for the fleet."""
        return answer({"items": [service.engine.describe(source)], "next": None})

    @router.get("/pruned", responses=_page(PrunedPage), summary="What retention took out")
    async def pruned(
        limit: Annotated[int, limit_query] = 100, after: AfterQuery = None
    ) -> Response:
        """Answer when, why and how many records, alerts and actions went."""
        at = pair_of(after)
        rows, following = await in_thread(
            lambda c: pages.pruned_page(c, limit=limit, after=at[0] if at else None)
        )
        items = [
            {"at": format_time(row["at_ns"]), "reason": row["reason"],
             "before": format_time(row["before_ns"]), "records": row["n_records"],
             "alerts": row["n_alerts"], "actions": row["n_actions"]}
            for row in rows
        ]  # fmt: skip
        return answer(
            {"items": items, "next": cursor_of(None if following is None else (following, 0))}
        )

    return router


def source_item(row: dict[str, Any], service: Service) -> dict[str, Any]:
    """Return a source's row as its page shows it."""
    return {
        "source": row["name"],
        "records": row["n_records"],
        "over_level": row["n_over_level"],
        "last": format_time(row["last_ns"]) if row["last_ns"] >= 0 else None,
        "model": row["model"],
        "member": service.engine.member(row["name"]),
        "excess": row["excess"],
        "sustained": row["sustained"],
        "alert": ALERT_WORDS[row["alert"]],
    }


class _Layouts:
    """Stored layouts by id; they never change once written."""

    def __init__(self) -> None:
        self._known: dict[int, tuple[str, list[dict[str, Any]]]] = {}

    def answers(
        self, connection: sa.Connection, records: list[StoredRecord]
    ) -> list[dict[str, Any]]:
        found = []
        for record in records:
            if record.layout_id not in self._known:
                model, channels = pages.layout_of(connection, record.layout_id)
                self._known[record.layout_id] = model, orjson.loads(channels)
            model, channels_ = self._known[record.layout_id]
            found.append(stored_answer(record, channels_, model))
        return found


def _page(model: type[Any]) -> dict[int | str, dict[str, Any]]:
    return {200: {"model": model}}


def answer(body: dict[str, Any]) -> Response:
    """Return a JSON answer."""
    return Response(orjson.dumps(body), media_type="application/json")


def time_of(name: str, text: str | None) -> int | None:
    """Return a time of the query; raises Problem."""
    if text is None:
        return None
    try:
        # A plus sign in a query is read as a space.
        return parse_time(text[:19] + text[19:].replace(" ", "+"))
    except ValueError as error:
        raise Problem("bad-query", f"{name} = {text[:60]!r} {error}") from None


def cursor_of(place: tuple[int, int] | None) -> str | None:
    """Return where the next page begins, as clients send it back."""
    return None if place is None else f"{place[0]}-{place[1]}"


def pair_of(after: str | None) -> tuple[int, int] | None:
    """Return what `cursor_of` wrote; raises Problem."""
    if after is None:
        return None
    match = _PAIR.fullmatch(after)
    if match is None:
        raise Problem("bad-query", f"after = {after[:60]!r} is not the `next` of a page before")
    return int(match.group(1)), int(match.group(2))
