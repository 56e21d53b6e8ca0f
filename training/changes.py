"""Real changes of plant, declared by the site: from when history counts, and why.

They stand in a small CSV beside the kept models, so that one command says it and every
night honours it. A model from before a change is no witness of what is normal now.
"""

from __future__ import annotations

import csv
import io
import os
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

from scoring.alerts import time_text
from scoring.errors import OddbranchError
from training.history.exclusions import Exclusion

CHANGES_FILE: Final = "changes.csv"
HEADING: Final = ["source", "since", "reason", "declared"]
# Earlier than any record.
_EVER_NS: Final = -(1 << 62)


class BadChange(OddbranchError):
    """A declared change that cannot be used."""


@dataclass(frozen=True, slots=True)
class Change:
    """A change of plant. source: "" for all. since_ns: history counts from here on."""

    source: str
    since_ns: int
    reason: str
    declared_ns: int

    def touches(self, source: str) -> bool:
        """Return whether it is a change of this source."""
        return self.source in ("", source)

    @property
    def exclusion(self) -> Exclusion:
        """The period that learning leaves out."""
        return Exclusion(self.source, _EVER_NS, self.since_ns, f"before a change: {self.reason}")


def parse_time(text: str) -> int:
    """Return an RFC 3339 time with its offset in ns since 1970; raises BadChange."""
    try:
        moment = datetime.fromisoformat(text.strip().replace("Z", "+00:00"))
    except ValueError:
        moment = None
    if moment is None or moment.tzinfo is None:
        raise BadChange(
            f"{text!r} is no time with an offset; write it like 2026-12-01T06:00:00Z or "
            "2026-12-01T07:00:00+01:00"
        )
    return round(moment.timestamp()) * 10**9


def load_changes(folder: Path) -> tuple[Change, ...]:
    """Return the declared changes, in the order they were declared; raises BadChange."""
    path = folder / CHANGES_FILE
    try:
        rows = list(csv.reader(path.read_text(encoding="utf-8").splitlines()))
    except FileNotFoundError:
        return ()
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise BadChange(f"{path}: cannot be read: {error}") from None
    if not rows or rows[0] != HEADING:
        raise BadChange(f"{path}: the first line must read {','.join(HEADING)}")
    found = []
    for number, row in enumerate(rows[1:], start=2):
        if len(row) != len(HEADING):
            raise BadChange(f"{path}, line {number}: {len(row)} cells; a change has {len(HEADING)}")
        try:
            found.append(Change(row[0], parse_time(row[1]), row[2], parse_time(row[3])))
        except BadChange as error:
            raise BadChange(f"{path}, line {number}: {error}") from None
    return tuple(found)


def declare(folder: Path, source: str, since_ns: int, reason: str, now: datetime) -> Change:
    """Add a change; one of the same source and time is replaced. Raises BadChange.

    Hold the lock of the kept models meanwhile.
    """
    if not reason.strip():
        raise BadChange("a change needs its reason, for whoever reads the report in a year")
    if since_ns > now.timestamp() * 1e9:
        raise BadChange(f"{time_text(since_ns)} is still to come; declare a change when it is made")
    now_ns = round(now.timestamp()) * 10**9
    change = Change(source, since_ns, " ".join(reason.split()), now_ns)
    kept = [c for c in load_changes(folder) if (c.source, c.since_ns) != (source, since_ns)]
    _write(folder, [*kept, change])
    return change


def take_back(folder: Path, source: str, since_ns: int) -> Change:
    """Remove a change; raises BadChange where there is none such."""
    changes = load_changes(folder)
    found = [c for c in changes if (c.source, c.since_ns) == (source, since_ns)]
    if not found:
        raise BadChange(
            f"no change of {source or 'all sources'} at {time_text(since_ns)} was declared; "
            "`oddbranch models since` lists them"
        )
    _write(folder, [c for c in changes if c not in found])
    return found[0]


def _write(folder: Path, changes: Sequence[Change]) -> None:
    text = io.StringIO()
    out = csv.writer(text, lineterminator="\n")
    out.writerow(HEADING)
    for c in changes:
        out.writerow([c.source, time_text(c.since_ns), c.reason, time_text(c.declared_ns)])
    folder.mkdir(parents=True, exist_ok=True)
    # A file in one step, so that a job that dies leaves the old one or the new one.
    aside = folder / f".{CHANGES_FILE}"
    with aside.open("w", encoding="utf-8") as file:
        file.write(text.getvalue())
        file.flush()
        os.fsync(file.fileno())
    aside.replace(folder / CHANGES_FILE)


def since(changes: Iterable[Change], source: str) -> Change | None:
    """Return the latest change of a source, None without one."""
    own = [change for change in changes if change.touches(source)]
    return max(own, key=lambda change: change.since_ns, default=None)


def change_line(change: Change) -> str:
    """Return a change for people."""
    day = datetime.fromtimestamp(change.declared_ns / 1e9, UTC).strftime("%Y-%m-%d")
    return (
        f"{change.source or 'all sources'}: history counts from {time_text(change.since_ns)} on: "
        f"{change.reason} (declared {day})"
    )
