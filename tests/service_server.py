"""Servers over the stand-in model or a real one: `python -m tests.service_server --spawn`.

Reads lines with a JSON list, a folder and settings as section.key=value or variables of the
environment as NAME=value, and forks a server for each; its process id is answered. Importing
the service once and not for every start makes it cheap to kill a server many times.
"""

from __future__ import annotations

import contextlib
import gc
import json
import os
import signal
import sys
from functools import partial
from pathlib import Path
from typing import Any

from scoring.errors import OddbranchError
from service.running import Service
from service.scoring_engine import load_engine
from service.server import listen, run, say_where
from service.settings import load_settings
from tests.service_fakes import load_fake


def main(folder: Path, words: list[str]) -> None:
    """Serve until told to stop."""
    options: dict[str, dict[str, Any]] = {
        "model": {"path": folder / "model"},
        "store": {"data": folder / "data"},
        "server": {"port": 0},
    }
    for word in words:
        name, _, value = word.partition("=")
        if name.isupper():
            os.environ[name] = value
            continue
        section, _, key = name.partition(".")
        options.setdefault(section, {})[key] = json.loads(value)
    settings = load_settings(None, options)
    real = partial(load_engine, alerts=settings.alerts)
    service = Service(settings, real if _is_real(folder) else load_fake)
    service.open()
    listener = listen(settings)
    say_where(settings, listener)
    sys.stdout.flush()
    run(service, listener)


def spawn() -> None:
    """Fork a server for every line."""
    signal.signal(signal.SIGCHLD, signal.SIG_IGN)
    is_warm = False
    for line in sys.stdin:
        folder, *words = json.loads(line)
        if not is_warm and _is_real(Path(folder)):
            # Kernels too are then loaded once and not for every server.
            with contextlib.suppress(OddbranchError):
                load_engine(Path(folder) / "model")
            is_warm = True
        gc.freeze()
        pid = os.fork()
        if pid == 0:
            signal.signal(signal.SIGCHLD, signal.SIG_DFL)
            _redirect(Path(folder))
            main(Path(folder), words)
            os._exit(0)
        sys.stdout.write(f"{pid}\n")
        sys.stdout.flush()


def _is_real(folder: Path) -> bool:
    return (folder / "model" / "tables.npz").exists()


def _redirect(folder: Path) -> None:
    os.close(0)
    for number, name in ((1, "server.out"), (2, "server.log")):
        handle = os.open(folder / name, os.O_CREAT | os.O_WRONLY | os.O_APPEND, 0o600)
        os.dup2(handle, number)
        os.close(handle)


if __name__ == "__main__":
    if sys.argv[1:] == ["--spawn"]:
        spawn()
    else:
        main(Path(sys.argv[1]), sys.argv[2:])
