"""`oddbranch serve`: settings, checks, then the web server."""

from __future__ import annotations

import gc
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from functools import partial
from pathlib import Path
from typing import Any

import click

from service.access import require_tokens_off_loopback
from service.running import Service
from service.scoring_engine import load_engine
from service.server import listen, run, say_where
from service.settings import load_settings


@click.command("serve")
@click.option("--config", type=click.Path(path_type=Path), help="Settings file.")
@click.option("--model", type=click.Path(path_type=Path), help="Directory of the model.")
@click.option("--data", type=click.Path(path_type=Path), help="Data folder of the store.")
@click.option("--host", help="Address to listen on (127.0.0.1).")
@click.option("--port", type=int, help="Port to listen on (8321).")
def serve_command(
    config: Path | None, model: Path | None, data: Path | None, host: str | None, port: int | None
) -> None:
    """Score records over HTTP.

    An option wins over an environment variable, that over the file given with --config.
    """
    settings = load_settings(config, _options(model, data, host, port))
    service = Service(settings, partial(load_engine, alerts=settings.alerts))
    with _quickly():
        service.open()
    try:
        require_tokens_off_loopback(settings, service.tokens)
        listener = listen(settings)
        say_where(settings, listener)
    except BaseException:
        service.database.close()
        raise
    run(service, listener)


@contextmanager
def _quickly() -> Iterator[None]:
    """Spare a start what it has no use for.

    Numba, which only asks whether scipy's linear algebra is there, would import it and all
    that it needs, where learning is installed too. What a start makes stays, so nobody
    looks for garbage in it meanwhile.
    """
    sys.modules.setdefault("scipy.linalg", None)  # type: ignore[arg-type]
    gc.disable()
    try:
        yield
    finally:
        gc.enable()


def _options(
    model: Path | None, data: Path | None, host: str | None, port: int | None
) -> dict[str, dict[str, Any]]:
    given: dict[str, dict[str, Any]] = {
        "model": {"path": model},
        "store": {"data": data},
        "server": {"host": host, "port": port},
    }
    return {
        section: {key: value for key, value in keys.items() if value is not None}
        for section, keys in given.items()
    }
