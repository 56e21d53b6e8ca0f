"""A server over the stand-in model: `python -m tests.service_server FOLDER [section.key=value]`."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Any

from service.running import Service
from service.serve import listen, run, say_where
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
        section, _, key = name.partition(".")
        options.setdefault(section, {})[key] = json.loads(value)
    settings = load_settings(None, options)
    service = Service(settings, load_fake)
    service.open()
    listener = listen(settings)
    say_where(settings, listener)
    sys.stdout.flush()
    run(service, listener)


if __name__ == "__main__":
    main(Path(sys.argv[1]), sys.argv[2:])
