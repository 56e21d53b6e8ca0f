"""`oddbranch export`: stored records as a CSV file that `learn` and `score` take.

Wide: time, source, then every channel that any model had. A reading that is missing or of
bad quality is an empty cell. It only reads, and may run beside the service.
"""

from __future__ import annotations

import csv
import sys
from collections.abc import Iterator
from contextlib import nullcontext
from pathlib import Path
from typing import Any, TextIO

import click
import orjson
import sqlalchemy as sa

from scoring.errors import OddbranchError
from service.layout import unpack_readings
from service.settings import load_settings
from service.store import pages
from service.store.database import Database
from service.store.states import StoredRecord
from service.store.tables import layout
from service.times import format_time, parse_time

# Records read at once; memory does not grow with the store.
_N_PAGE = 5000


class BadExport(OddbranchError):
    """What was asked for cannot be written."""


@click.command("export")
@click.option("--config", type=click.Path(path_type=Path), help="Settings file of the service.")
@click.option("--data", type=click.Path(path_type=Path), help="Data folder, as given to `serve`.")
@click.option("--from", "from_", help="First time, RFC 3339 with an offset.")
@click.option("--to", help="Time after the last.")
@click.option("--source", help="One source only.")
@click.option("--out", type=click.Path(path_type=Path), help="CSV file; standard output if absent.")
def export_command(
    config: Path | None,
    data: Path | None,
    from_: str | None,
    to: str | None,
    source: str | None,
    out: Path | None,
) -> None:
    """Write stored records as CSV, in order of source and time."""
    bounds = _time("--from", from_), _time("--to", to)
    settings = load_settings(config, {"store": {"data": data}} if data is not None else {})
    database = Database(settings.store.data, settings.store.url.get_secret_value())
    try:
        database.migrate()
        with (
            out.open("w", encoding="utf-8", newline="") if out else nullcontext(sys.stdout) as file
        ):
            n_records = write_csv(database, file, source, bounds)
    finally:
        database.close()
    if out:
        click.echo(f"wrote {out} with {n_records} records")


def write_csv(
    database: Database,
    file: TextIO,
    source: str | None,
    bounds: tuple[int | None, int | None],
) -> int:
    """Write the records between two times (ns, the second not included); return how many."""
    with database.read.connect() as connection:
        layouts = {
            row.id: orjson.loads(row.channels)
            for row in connection.execute(sa.select(layout).order_by(layout.c.id))
        }
        names = list(dict.fromkeys(c["name"] for channels in layouts.values() for c in channels))
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(["time", "source", *names])
        n_records = 0
        for record in _records(connection, source, bounds):
            readings = _usable(record, layouts[record.layout_id])
            cells = [readings.get(name) for name in names]
            writer.writerow([format_time(record.time_ns), record.source, *cells])
            n_records += 1
    return n_records


def _records(
    connection: sa.Connection, source: str | None, bounds: tuple[int | None, int | None]
) -> Iterator[StoredRecord]:
    after = None
    while True:
        found, after = pages.records_page(
            connection, source=source, from_ns=bounds[0], to_ns=bounds[1],
            newest_first=False, limit=_N_PAGE, after=after,
        )  # fmt: skip
        yield from found
        if after is None:
            return


def _usable(record: StoredRecord, channels: list[dict[str, Any]]) -> dict[str, Any]:
    extra = orjson.loads(record.extra) if record.extra else None
    readings = unpack_readings(record.readings, extra, channels)
    for name, mark in (extra or {}).get("quality", {}).items():
        if mark == "bad":
            readings[name] = None
    return readings


def _time(option: str, text: str | None) -> int | None:
    if text is None:
        return None
    try:
        return parse_time(text)
    except ValueError as error:
        raise BadExport(f"{option} {text!r} {error}") from None
