"""Alerts and what people do about them: pages, and one POST for each action."""

# No postponed annotations here: the framework reads them, and they hold values of this app.

import asyncio
from collections.abc import Callable
from functools import partial
from typing import Annotated, Any, Literal, TypeVar

import orjson
import sqlalchemy as sa
from fastapi import APIRouter, Depends, Path, Query, Request, Response
from pydantic import BaseModel, ValidationError
from starlette.exceptions import HTTPException

from scoring.alert_actions import Action
from scoring.alert_standing import AlertStanding
from scoring.alerts import Alert
from service.alert_schemas import (
    ALERT_ID,
    ALERT_ID_PATTERN,
    ActionsPage,
    AlertItem,
    AlertsPage,
    CommentBody,
    LabelBody,
    NoteBody,
    OutOfServiceBody,
    ShelveBody,
    SourceService,
)
from service.alerting import flood_answer, read_alert
from service.bodies import BodyReader, ClientGone
from service.problems import Problem
from service.routes_read import (
    AfterQuery,
    FromQuery,
    SourceQuery,
    ToQuery,
    answer,
    cursor_of,
    pair_of,
    refuse_unknown,
    source_item,
    time_of,
)
from service.running import Service
from service.schemas import ADVICE, SourceItem
from service.store import alerts as stored
from service.store.group import Group
from service.store.pages import source_row
from service.times import format_time, parse_time

T = TypeVar("T")

StateQuery = Annotated[
    Literal["open", "raised", "acknowledged", "cleared"] | None,
    Query(description="state, or open for all not cleared, no unit", examples=["open"]),
]
AlertPath = Annotated[
    str,
    Path(
        alias="id",
        description="id of the alert, no unit",
        examples=[ALERT_ID],
        pattern=ALERT_ID_PATTERN,
    ),
]
AlertQuery = Annotated[
    str | None,
    Query(
        alias="alert",
        description="id of the alert, no unit",
        examples=[ALERT_ID],
        pattern=ALERT_ID_PATTERN,
    ),
]
SourcePath = Annotated[
    str,
    Path(
        description="name of the source, no unit",
        examples=["mill-lane-2"],
        min_length=1,
        max_length=200,
        pattern=r"^[^\u0000-\u001f\u007f]+$",
    ),
]
# Path of an action on an alert: its name in `scoring`, its body, its summary.
_ON_ALERT: dict[str, tuple[str, type[BaseModel], str]] = {
    "acknowledge": ("acknowledge", CommentBody, "Say that someone has seen the alert"),
    "shelve": ("shelve", ShelveBody, "Let alerts of this kind at this source call nobody"),
    "unshelve": ("unshelve", CommentBody, "End the shelf of this kind at this source"),
    "note": ("note", NoteBody, "Write something about the alert"),
    "label": ("label", LabelBody, "Say whether the alert was real or a nuisance"),
}
_ON_SOURCE: dict[str, tuple[str, type[BaseModel], str]] = {
    "out-of-service": ("out_of_service", OutOfServiceBody, "Score and store, raise no alert"),
    "in-service": ("back_in_service", CommentBody, "Put the source back in service"),
}


def alerts_router(service: Service) -> APIRouter:
    """Return the routes of alerts and actions."""
    router = APIRouter(dependencies=[Depends(refuse_unknown)])
    _add_pages(router, service)
    for path, (what, body, summary) in _ON_ALERT.items():
        _add_on_alert(router, service, path, what, body, summary)
    for path, (what, body, summary) in _ON_SOURCE.items():
        _add_on_source(router, service, path, what, body, summary)
    # After the actions: what is wrong with a method there is theirs to say.
    _add_ones(router, service)
    return router


async def _in_thread(service: Service, read: Callable[[sa.Connection], T]) -> T:
    def run() -> T:
        with service.database.read.connect() as connection:
            return read(connection)

    return await asyncio.to_thread(run)


def _add_ones(router: APIRouter, service: Service) -> None:
    @router.get(
        "/alerts/{id}", responses={200: {"model": AlertItem}}, summary="One alert as it is now"
    )
    async def one_alert(id_: AlertPath) -> Response:
        """Answer one alert, open or cleared, as the list has it."""
        data = await _in_thread(service, lambda c: stored.alert_data(c, id_))
        if data is None:
            raise Problem("not-found", f"there is no alert {id_!r}; GET /alerts lists them")
        return answer(read_alert(data).as_json())

    @router.get(
        "/sources/{source:path}",
        responses={200: {"model": SourceItem}},
        summary="One source and its standing",
    )
    async def one_source(source: SourcePath) -> Response:
        """Answer one source as the list has it."""
        row = await _in_thread(service, lambda c: source_row(c, source))
        if row is not None:
            return answer(source_item(row, service))
        if source.rpartition("/")[2] in _ON_SOURCE:
            raise HTTPException(405, headers={"Allow": "POST"})
        raise Problem("not-found", f"there is no source {source!r}; GET /sources lists them")


def _add_pages(router: APIRouter, service: Service) -> None:
    n_page = service.settings.limits.n_page
    limit_query = Query(description="items at most, count", ge=1, le=n_page, examples=[100])
    in_thread = partial(_in_thread, service)

    @router.get(
        "/alerts", responses={200: {"model": AlertsPage}}, summary="Alerts, latest raised first"
    )
    async def alerts(
        source: SourceQuery = None,
        state: StateQuery = None,
        from_: FromQuery = None,
        to: ToQuery = None,
        limit: Annotated[int, limit_query] = 100,
        after: AfterQuery = None,
    ) -> Response:
        """Answer alerts; `from` and `to` are of the time at which they were raised."""
        read = partial(
            stored.alerts_page, source=source, state=state, from_ns=time_of("from", from_),
            to_ns=time_of("to", to), limit=limit, after=pair_of(after),
        )  # fmt: skip
        (found, following), flood = await in_thread(lambda c: (read(c), flood_answer(c)))
        items = [read_alert(data).as_json() for data in found]
        return answer(
            {"items": items, "next": cursor_of(following), "flood": flood, "advice": ADVICE}
        )

    @router.get(
        "/actions", responses={200: {"model": ActionsPage}}, summary="What was done, newest first"
    )
    async def actions(
        source: SourceQuery = None,
        alert: AlertQuery = None,
        limit: Annotated[int, limit_query] = 100,
        after: AfterQuery = None,
    ) -> Response:
        """Answer who did what about an alert or a source, when and why."""
        at = pair_of(after)
        read = partial(
            stored.actions_page, source=source, alert=alert, limit=limit,
            after=at[0] if at else None,
        )  # fmt: skip
        rows, following = await in_thread(read)
        items = [_action_item(row) for row in rows]
        return answer(
            {"items": items, "next": cursor_of(None if following is None else (following, 0))}
        )


def _add_on_alert(
    router: APIRouter, service: Service, path: str, what: str, body: type[BaseModel], summary: str
) -> None:
    @router.post(
        f"/alerts/{{id}}/{path}",
        name=what,
        responses={200: {"model": AlertItem}},
        summary=summary,
        openapi_extra=_described(body),
    )
    async def act(request: Request, id_: AlertPath) -> Response:
        """Answer the alert as it is then; the action is kept with who did it and when."""
        given = await _body(service, request, body)
        now_ns = service.clock_ns()

        def work(group: Group) -> Alert:
            action = _action(what, request.state.by, given, alert_id=id_)
            if what in ("shelve", "unshelve"):
                action = service.keeper.of_kind(group, action)
            return service.keeper.on_alert(group, action, now_ns)

        alert = await service.writer.act(work)
        return answer(alert.as_json())


def _add_on_source(
    router: APIRouter, service: Service, path: str, what: str, body: type[BaseModel], summary: str
) -> None:
    @router.post(
        f"/sources/{{source:path}}/{path}",
        name=what,
        responses={200: {"model": SourceService}},
        summary=summary,
        openapi_extra=_described(body),
    )
    async def act(request: Request, source: SourcePath) -> Response:
        """Answer the source's times out of service; the action is kept with who and when."""
        action = _action(what, request.state.by, await _body(service, request, body))
        now_ns = service.clock_ns()

        def work(group: Group) -> AlertStanding:
            return service.keeper.on_source(group, source, action, now_ns)

        standing = await service.writer.act(work)
        periods = [
            {"start": format_time(period.start_ns),
             "end": None if period.end_ns is None else format_time(period.end_ns),
             "reason": period.reason, "by": period.by}
            for period in standing.out_of_service
        ]  # fmt: skip
        return answer({"source": source, "out_of_service": periods})


def _described(body: type[BaseModel]) -> dict[str, Any]:
    schema = body.model_json_schema()
    needed = schema.get("required", [])
    example = {
        name: field["examples"][0]
        for name, field in schema["properties"].items()
        if "examples" in field
    }
    return {
        "requestBody": {
            "required": bool(needed),
            "content": {"application/json": {"schema": schema, "example": example}},
        }
    }


async def _body(service: Service, request: Request, model: type[BaseModel]) -> dict[str, Any]:
    """Return an action's members; nothing at all is an empty object. Raises Problem."""
    limit_mb = service.settings.limits.body_mb
    reader = BodyReader(service, request.scope, request.receive, limit_mb)
    if reader.is_ndjson:
        raise Problem("bad-media-type", "an action is one object; send application/json")
    try:
        whole = await reader.whole()
        given = orjson.loads(whole) if whole.strip() else {}
        return dict(model.model_validate(given).model_dump())
    except ClientGone:
        raise Problem("bad-json", "the connection was closed before the body was whole") from None
    except orjson.JSONDecodeError as error:
        raise Problem("bad-json", f"the body is not JSON: {error}") from None
    except ValidationError as error:
        first = error.errors()[0]
        name = ".".join(str(part) for part in first["loc"]) or "the body"
        known = ", ".join(model.model_fields)
        raise Problem("bad-action", f"{name[:60]}: {first['msg']}; known are {known}") from None
    finally:
        reader.release()


def _action(what: str, by: str, given: dict[str, Any], alert_id: str = "") -> Action:
    until: str | None = given.get("until")
    try:
        until_ns = None if until is None else parse_time(until)
    except ValueError as error:
        raise Problem("bad-action", f"until {error}") from None
    is_shelf = what == "shelve"
    return Action(
        what,
        by,
        comment=given.get("reason") or given.get("comment") or "",
        alert_id=alert_id,
        label=given.get("label", ""),
        until_ns=until_ns if is_shelf else None,
        end_ns=None if is_shelf else until_ns,
    )


def _action_item(row: dict[str, Any]) -> dict[str, Any]:
    return {
        "at": format_time(row["at_ns"]),
        "by": row["who"],
        "what": row["what"],
        "source": row["source"],
        "alert": row["alert"],
        "comment": row["comment"],
        "details": orjson.loads(row["details"]),
    }
