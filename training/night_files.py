"""The reports of past nights in their folder: written aside, shown in one step, pruned."""

from __future__ import annotations

import json
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, Final

from training.report.page import write_text

_ASIDE: Final = ".night-"
_KINDS: Final = (".html", ".json")


@dataclass(frozen=True)
class NightFiles:
    """The folder of the reports."""

    folder: Path

    def prepare(self, at: datetime, verdict: str, page: str, data: dict[str, Any]) -> str:
        """Write one night's files where nobody looks, and return their common name."""
        self.folder.mkdir(parents=True, exist_ok=True)
        for left in self.folder.glob(f"{_ASIDE}*"):
            left.unlink(missing_ok=True)
        name = f"{at.strftime('%Y%m%dT%H%M%SZ')}-{verdict}"
        write_text(self.folder / f"{_ASIDE}{name}.html", page)
        text = json.dumps(data, indent=1, allow_nan=False) + "\n"
        write_text(self.folder / f"{_ASIDE}{name}.json", text)
        return name

    def show(self, name: str) -> Path:
        """Let prepared files appear under their name; return the page."""
        for kind in _KINDS:
            (self.folder / f"{_ASIDE}{name}{kind}").replace(self.folder / f"{name}{kind}")
        return self.folder / f"{name}.html"

    def names(self) -> list[str]:
        """Return the names of the nights that are there, oldest first."""
        return sorted(path.stem for path in self.folder.glob("[0-9]*-*.json"))

    def last_left_out(self) -> float | None:
        """Return the share that the last learned night left out of its tables."""
        for name in reversed(self.names()):
            try:
                data = json.loads((self.folder / f"{name}.json").read_text(encoding="utf-8"))
                return float(data["left_out_share"])
            except (OSError, ValueError, KeyError, TypeError):
                continue
        return None

    def prune(self, keep: int) -> None:
        """Remove all but the newest nights."""
        for name in self.names()[:-keep]:
            for kind in _KINDS:
                (self.folder / f"{name}{kind}").unlink(missing_ok=True)
