"""The one page for people: open alerts, sources against their level, records over a level.

Plain HTML made here, nothing loaded from elsewhere; the browser needs no script.
"""

from __future__ import annotations

import asyncio
import time
from html import escape
from typing import Any

import orjson
import sqlalchemy as sa
from fastapi import APIRouter
from starlette.responses import HTMLResponse

from scoring.alerts import Alert
from service.alerting import flood_answer, read_alert
from service.answers import stored_answer
from service.engine import ALERT_WORDS
from service.running import Service
from service.schemas import ADVICE
from service.store import pages
from service.store.alerts import alerts_page
from service.times import format_time

_N_SOURCES = 200
_N_ALERTS = 20
_N_OPEN = 100
_REFRESH_S = 30

_STYLE = """
:root { color-scheme: light dark; --line: #8884; --bar: #3b7a78; --over: #b4462f; --soft: #8882; }
body { font: 1rem/1.45 system-ui, sans-serif; margin: 0 auto; max-width: 60rem; padding: 1rem; }
h1 { font-size: 1.3rem; margin: 0 0 .2rem; } h2 { font-size: 1.05rem; margin: 1.6rem 0 .4rem; }
p { margin: .2rem 0; } .quiet { opacity: .75; font-size: .9rem; }
.advice { border-left: .3rem solid var(--over); padding: .3rem .6rem; background: var(--soft); }
ul { list-style: none; margin: 0; padding: 0; }
li { border-top: 1px solid var(--line); padding: .5rem 0; }
.source { display: grid; grid-template-columns: minmax(8rem, 1fr) 2fr 5rem; gap: .2rem .8rem; }
.source .quiet { grid-column: 1 / -1; }
.track { background: var(--soft); height: .8rem; align-self: center; position: relative; }
.track i { display: block; height: 100%; background: var(--bar); }
.track.over i { background: var(--over); }
.track b { position: absolute; left: 66.6%; top: -.2rem; bottom: -.2rem; border-left: 2px solid; }
.number { text-align: right; font-variant-numeric: tabular-nums; }
@media (max-width: 32rem) { .source { grid-template-columns: 1fr 4.5rem; }
  .track { grid-column: 1 / -1; grid-row: 2; } }
"""


def page_router(service: Service) -> APIRouter:
    """Return the route of the page."""
    router = APIRouter()

    def read() -> tuple[str, list[dict[str, Any]], list[dict[str, Any]]]:
        with service.database.read.connect() as connection:
            found, _ = alerts_page(connection, state="open", limit=_N_OPEN)
            opened = "".join(_open_alert(read_alert(data)) for data in found) or (
                "<li class=quiet>No alert is open.</li>"
            )
            flood = flood_answer(connection)
            if flood is not None:
                opened = f"<li><strong>{escape(flood['sentence'])}</strong></li>{opened}"
            return opened, _sources(connection), _alerts(connection)

    @router.get("/", include_in_schema=False)
    async def page() -> HTMLResponse:
        """Answer the page."""
        opened, sources, alerts = await asyncio.to_thread(read)
        level = service.engine.levels.get("sustained", 0.0)
        policy = "default-src 'none'; style-src 'unsafe-inline'; frame-ancestors 'none'"
        return HTMLResponse(
            _html(opened, sources, alerts, level, service.engine.name),
            headers={"content-security-policy": policy, "cache-control": "no-store"},
        )

    return router


def _sources(connection: sa.Connection) -> list[dict[str, Any]]:
    rows, _ = pages.sources_page(connection, limit=_N_SOURCES, after=None)
    rows.sort(key=lambda row: (-(row["sustained"] or 0.0), row["name"]))
    return rows


def _alerts(connection: sa.Connection) -> list[dict[str, Any]]:
    found, _ = pages.over_level_page(
        connection, source=None, from_ns=None, to_ns=None, limit=_N_ALERTS, after=None
    )
    answers = []
    for record in found:
        model, channels = pages.layout_of(connection, record.layout_id)
        answers.append(stored_answer(record, orjson.loads(channels), model))
    return answers


def _html(
    opened: str,
    sources: list[dict[str, Any]],
    alerts: list[dict[str, Any]],
    level: float,
    model: str,
) -> str:
    now = format_time(int(time.time()) * 1_000_000_000)
    source_lines = "".join(_source(row, level) for row in sources) or (
        "<li class=quiet>No record has come yet; the README shows how to post one.</li>"
    )
    alert_lines = "".join(_alert(answer) for answer in alerts) or (
        "<li class=quiet>No record has passed a level.</li>"
    )
    return f"""<!doctype html>
<html lang="en"><head><meta charset="utf-8"><title>oddbranch</title>
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta http-equiv="refresh" content="{_REFRESH_S}"><style>{_STYLE}</style></head><body>
<h1>What is odd in the fleet</h1>
<p class="quiet">{now}, model {escape(model)}</p>
<p class="advice">{escape(ADVICE)}</p>
<h2>Open alerts, latest first</h2>
<ul>{opened}</ul>
<h2>Sources, most sustained first</h2>
<p class="quiet">Bar: sustained excess in nats; the mark is the level of {level:.2f} nats.</p>
<ul>{source_lines}</ul>
<h2>Latest records over a level</h2>
<ul>{alert_lines}</ul>
</body></html>
"""


def _source(row: dict[str, Any], level: float) -> str:
    sustained = row["sustained"]
    # The mark stands at two thirds of the track.
    share = 0.0 if sustained is None or level <= 0 else max(0.0, sustained / level) * 2 / 3
    over = " over" if sustained is not None and sustained > level else ""
    shown = "no score" if sustained is None else f"{sustained:.2f}"
    last = format_time(row["last_ns"]) if row["last_ns"] >= 0 else "none in order"
    alert = ALERT_WORDS[row["alert"]]
    return (
        f'<li class="source"><span>{escape(row["name"])}</span>'
        f'<span class="track{over}"><i style="width:{min(share, 1.0):.1%}"></i><b></b></span>'
        f'<span class="number">{shown}</span>'
        f'<span class="quiet">last record {last}, {row["n_records"]} stored, '
        f"{row['n_over_level']} over a level{f', {alert} alert' if alert else ''}</span></li>"
    )


def _open_alert(alert: Alert) -> str:
    state = alert.state
    if alert.acknowledged_by:
        state += f" by {alert.acknowledged_by}"
    if alert.quiet:
        state += f", {alert.quiet}"
    near = f"; goes with {', '.join(alert.neighbours)}" if alert.neighbours else ""
    return (
        f"<li><strong>{escape(alert.source)}</strong> {escape(alert.sentence)}"
        f'<p class="quiet">{escape(alert.kind)}, since {format_time(alert.since_ns)}, '
        f"{escape(state)}{escape(near)}, id {escape(alert.id)}</p></li>"
    )


def _alert(answer: dict[str, Any]) -> str:
    return (
        f"<li><strong>{escape(answer['source'])}</strong> {answer['time']}: "
        f"{'sustained' if answer['alert'] == 'sustained' else 'single record'}, "
        f"excess {_number(answer['excess'])} nats{_suspect(answer['suspect'])}</li>"
    )


def _suspect(suspect: dict[str, Any] | None) -> str:
    if suspect is None:
        return ""
    expected = suspect["expected"]
    text = f"; look at {escape(suspect['channel'])} first, it read {_number(suspect['reading'])}"
    if "words" in expected:
        likely = max(expected["words"], key=expected["words"].get, default="nothing")
        return f"{text}, {escape(likely)} was expected"
    low, high, reading = expected["low"], expected["high"], suspect["reading"]
    if low == low and high == high and low is not None and high is not None:
        # The channel furthest over its usual surprise may lie inside all the same.
        if isinstance(reading, int | float) and low <= reading <= high:
            return f"{text}, which is odd"
        return f"{text}, {_number(low)} to {_number(high)} was expected"
    return text


def _number(value: float | str | dict[str, Any] | None) -> str:
    if isinstance(value, dict):
        return _number(value["value"])
    if value is None or value != value:
        return "nothing"
    return escape(value) if isinstance(value, str) else f"{value:,.4g}".replace(",", " ")
