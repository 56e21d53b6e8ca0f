"""The web server on this process: the socket, where it is, and the run until told to stop."""

from __future__ import annotations

import gc
import socket
import ssl
import sys
from typing import Final

import click
import uvicorn

from scoring.errors import OddbranchError
from service.app import create_app
from service.running import Service
from service.schemas import ADVICE
from service.settings import Settings

# Connections that wait while the loop is busy.
_BACKLOG = 2048


class CannotListen(OddbranchError):
    """The address is taken or is not this machine's."""


def check_tls(settings: Settings) -> None:
    """Refuse files that no TLS can be made of, before anyone is told an address."""
    certificate, key = settings.server.tls_certificate, settings.server.tls_key
    if certificate is None and key is None:
        return
    if certificate is None or key is None:
        raise CannotListen(
            "TLS needs both server.tls_certificate and server.tls_key; give the other file too, or "
            "neither"
        )
    for path in (certificate, key):
        try:
            path.open("rb").close()
        except OSError as error:
            raise CannotListen(f"{path}: cannot be read for TLS: {error.strerror}") from None
    try:
        context = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
        # A service has nobody to ask for a password, and must not stand still on it.
        context.load_cert_chain(certificate, key, password=lambda: "")
    except ssl.SSLError as error:
        why = (error.reason or "no PEM").lower().replace("_", " ")
        raise CannotListen(
            f"{certificate} and {key}: TLS cannot use them: {why}; a certificate chain and the "
            "private key that belongs to it are wanted, both PEM and the key without a password"
        ) from None


def listen(settings: Settings) -> socket.socket:
    """Return a bound socket; raises CannotListen."""
    check_tls(settings)
    host, port = settings.server.host, settings.server.port
    try:
        found = socket.getaddrinfo(host, port, type=socket.SOCK_STREAM, flags=socket.AI_PASSIVE)
        family, _, _, _, address = found[0]
        listener = socket.socket(family, socket.SOCK_STREAM)
        listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        listener.bind(address)
        # From here on a client that is told the address can connect, and waits its turn.
        listener.listen(_BACKLOG)
    except OSError as error:
        raise CannotListen(
            f"cannot listen on {host} port {port}: {error.strerror}; "
            "stop what listens there, or choose another with --port"
        ) from None
    return listener


# How long the writer's thread may keep the loop's waiting, and the other way round. Python's own
# 5 ms answered 5 to 11 % fewer single requests; less than 1 ms costs more turns than it gains.
SWITCH_S: Final = 0.001


# Objects made since the last look for garbage that call for the next. A batch of a thousand makes
# four thousand, which are gone with its answer; Python's own 700 looked through them five times.
YOUNG: Final = 5000


def settle() -> None:
    """Take what lives as long as the service out of the rounds of the garbage collector.

    A model is some hundred thousand objects, and looking through them time and again took 7 % of
    what a batch of a thousand costs. What dies of them is freed when another model is taken.
    """
    gc.unfreeze()
    gc.collect()
    gc.freeze()
    gc.set_threshold(YOUNG, 10, 10)


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
    sys.setswitchinterval(SWITCH_S)
    settle()
    service.models.when_taken = settle
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
            # The front refuses with a reason before this does it without one.
            limit_concurrency=2 * server.n_connections + 16,
            timeout_graceful_shutdown=int(server.drain_s),
            ssl_certfile=server.tls_certificate,
            ssl_keyfile=server.tls_key,
        )
    ).run(sockets=[listener])
