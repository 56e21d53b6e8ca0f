"""What the store remembers of a source between records."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

# Before any time that a record can have.
NEVER_NS = -1


@dataclass(slots=True)
class SourceState:
    """One source's row. `live`, `alert_live`: the standings as objects, opaque here.

    standing: its bytes as stored; newest_ns: newest time of any stored record; last_ns:
    newest time in the standing. excess, sustained (nats), alert: of the record at last_ns.
    """

    id: int
    name: str
    newest_ns: int = NEVER_NS
    last_ns: int = NEVER_NS
    n_records: int = 0
    n_over_level: int = 0
    model: str = ""
    excess: float | None = None
    sustained: float | None = None
    alert: int = 0
    standing: bytes | None = None
    alert_standing: bytes | None = None
    live: Any = None
    alert_live: Any = None

    def copy(self) -> SourceState:
        """Return a copy to work on, so that a failed commit leaves this one as it was."""
        return SourceState(
            self.id, self.name, self.newest_ns, self.last_ns, self.n_records, self.n_over_level,
            self.model, self.excess, self.sustained, self.alert, self.standing,
            self.alert_standing, self.live, self.alert_live,
        )  # fmt: skip


@dataclass(frozen=True, slots=True)
class StoredRecord:
    """One record as the store has it; the columns are described in `tables`."""

    id: int
    source: str
    time_ns: int
    received_ns: int
    request: str
    layout_id: int
    surprise: float | None
    excess: float | None
    sustained: float | None
    suspect: int
    alert: int
    flags: int
    suspect_detail: bytes | None
    readings: bytes
    extra: bytes | None
