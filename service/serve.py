"""`oddbranch serve`: settings, checks, then the web server on this process."""

from __future__ import annotations

import socket
from pathlib import Path
from typing import Any

import click
import uvicorn

from scoring.errors import OddbranchError
from service.access import require_tokens_off_loopback
from service.app import create_app
from service.running import Service
from service.schemas import ADVICE
from service.scoring_engine import load_engine
from service.settings import Settings, load_settings


class CannotListen(OddbranchError):
    """The address is taken or is not this machine's."""


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
    service = Service(settings, load_engine)
    service.open()
    try:
        require_tokens_off_loopback(settings, service.tokens)
        listener = listen(settings)
        say_where(settings, listener)
    except BaseException:
        service.database.close()
        raise
    run(service, listener)


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


def listen(settings: Settings) -> socket.socket:
    """Return a bound socket; raises CannotListen."""
    host, port = settings.server.host, settings.server.port
    try:
        found = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM, flags=socket.AI_PASSIVE)
        family, _, _, _, address = found[0]
        listener = socket.socket(family, socket.SOCK_STREAM)
        listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        listener.bind(address)
    except OSError as error:
        raise CannotListen(
            f"cannot listen on {host} port {port}: {error.strerror}; "
            "stop what listens there, or choose another with --port"
        ) from None
    return listener


def say_where(settings: Settings, listener: socket.socket) -> None:
    """Print where the service listens, and how to take what it says."""
    scheme = "https" if settings.server.tls_certificate else "http"
    host = settings.server.host
    shown = f"[{host}]" if ":" in host else host
    click.echo(f"Serving on {scheme}://{shown}:{listener.getsockname()[1]} (stop with Ctrl-C)")
    click.echo(ADVICE)


def run(service: Service, listener: socket.socket) -> None:
    """Serve until the process is told to stop; what waits is stored first."""
    server = service.settings.server
    uvicorn.Server(
        uvicorn.Config(
            create_app(service),
            loop="uvloop",
            http="httptools",
            lifespan="on",
            access_log=False,
            log_level="warning",
            server_header=False,
            proxy_headers=False,
            limit_concurrency=server.n_connections,
            timeout_graceful_shutdown=int(server.drain_s),
            ssl_certfile=server.tls_certificate,
            ssl_keyfile=server.tls_key,
        )
    ).run(sockets=[listener])
