"""What the alert machine remembers of a source between records, and its bytes.

The clocks are two small arrays; open alerts, shelves and periods out of service are
JSON, empty most of the time. Channels of an open alert are kept by name, so that it
lives on under another model.
"""

from __future__ import annotations

import json
import struct
from dataclasses import asdict, dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scoring.alert_kernel import LAST, N_FLOATS, new_floats, new_ints
from scoring.alerts import Alert, Suspect
from scoring.errors import OddbranchError

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Version of the byte form: little-endian, head, whole numbers, decimal numbers, JSON.
ALERT_STANDING_FORMAT = 1
_HEAD = struct.Struct("<BqqHH")


class BadAlertStanding(OddbranchError):
    """Bytes that are no alert standing of this format."""


@dataclass(frozen=True, slots=True)
class Evidence:
    """The reading that speaks most against a channel so far, by `nats` beyond its usual."""

    nats: float
    suspect: Suspect


@dataclass(frozen=True, slots=True)
class Tally:
    """What an open scored alert has summed up.

    nats: by channel, own surprise beyond usual, each record's part capped, so that one
        glitch does not decide. evidence: by channel.
    crossings_ns: the last few times at which it went over a level. over: it is now.
    over_ns: the last record over a level.
    """

    nats: dict[str, float]
    evidence: dict[str, Evidence]
    crossings_ns: tuple[int, ...]
    over: bool
    over_ns: int


@dataclass(frozen=True, slots=True)
class Case:
    """An open alert with what goes on in it.

    active: the channels concerned just now, "" for the source as a whole.
    again_ns: when it is raised again if it still stands, -1 for never.
    """

    alert: Alert
    again_ns: int
    active: tuple[str, ...] = ()
    tally: Tally | None = None


@dataclass(frozen=True, slots=True)
class Shelf:
    """Alerts of one kind at a source that call nobody for a while."""

    kind: str
    from_ns: int
    until_ns: int
    reason: str
    by: str


@dataclass(frozen=True, slots=True)
class OutOfService:
    """A period in which a source is scored and stored, and raises no alert.

    Its records are not to be learned from. end_ns: None = until it is put back.
    """

    start_ns: int
    end_ns: int | None
    reason: str
    by: str

    def covers(self, time_ns: int) -> bool:
        """True if the source is out of service at a time."""
        return self.start_ns <= time_ns and (self.end_ns is None or time_ns < self.end_ns)


@dataclass(frozen=True)
class AlertStanding:
    """A source's alert standing.

    channels: hash of the instruments' names that the arrays are laid out for.
    heard_ns: when the source was last heard, by the receiver's clock; -1 = never.
    ints, floats: see scoring.alert_kernel.
    raised: kind and time of alerts raised lately, for damping.
    """

    channels: int
    heard_ns: int
    ints: Ints
    floats: Floats
    cases: tuple[Case, ...] = ()
    shelves: tuple[Shelf, ...] = ()
    out_of_service: tuple[OutOfService, ...] = ()
    raised: tuple[tuple[str, int], ...] = ()

    @property
    def open(self) -> tuple[Alert, ...]:
        """The open alerts as they stand now."""
        return tuple(case.alert for case in self.cases)

    @property
    def last_ns(self) -> int:
        """Time of the last record on time, -1 = none."""
        return int(self.ints[LAST])

    def case(self, kind: str) -> Case | None:
        """Return the open case of a kind, if there is one."""
        return next((case for case in self.cases if case.alert.kind == kind), None)

    def started_anew(self) -> AlertStanding:
        """Return it with its clocks as for a source just met, its last record's time kept."""
        n = self.floats.shape[1] - 1
        ints = new_ints(n)
        ints[LAST] = self.ints[LAST]
        return replace(self, ints=ints, floats=new_floats(n))

    def __eq__(self, other: object) -> bool:
        """Two standings are equal if their bytes are."""
        return isinstance(other, AlertStanding) and self.to_bytes() == other.to_bytes()

    __hash__ = None  # type: ignore[assignment]

    def to_bytes(self) -> bytes:
        """Return the byte form; `from_bytes` gives an equal standing."""
        head = _HEAD.pack(
            ALERT_STANDING_FORMAT,
            self.channels,
            self.heard_ns,
            len(self.ints),
            self.floats.shape[1],
        )
        return head + self.ints.tobytes() + self.floats.tobytes() + self._rest

    @cached_property
    def _rest(self) -> bytes:
        if not (self.cases or self.shelves or self.out_of_service or self.raised):
            return b""
        rest = {
            "cases": [asdict(case) for case in self.cases],
            "shelves": [asdict(shelf) for shelf in self.shelves],
            "out_of_service": [asdict(period) for period in self.out_of_service],
            "raised": self.raised,
        }
        return json.dumps(rest, separators=(",", ":"), allow_nan=False).encode()

    @classmethod
    def from_bytes(cls, data: bytes) -> AlertStanding:
        """Return the standing that `to_bytes` wrote; raises BadAlertStanding."""
        if len(data) < _HEAD.size or data[0] != ALERT_STANDING_FORMAT:
            raise BadAlertStanding(
                f"an alert standing of format {data[0] if data else 'none'} was met; "
                f"this version reads format {ALERT_STANDING_FORMAT}"
            )
        _, channels, heard_ns, n_ints, width = _HEAD.unpack_from(data)
        middle = _HEAD.size + 8 * n_ints
        end = middle + 8 * N_FLOATS * width
        if len(data) < end:
            raise BadAlertStanding(f"an alert standing of {len(data)} bytes is not whole")
        ints = np.frombuffer(data[_HEAD.size : middle], dtype="<i8").astype(np.int64)
        floats = np.frombuffer(data[middle:end], dtype="<f8").astype(np.float64)
        try:
            rest = _read_rest(data[end:])
        except (ValueError, KeyError, TypeError) as error:
            raise BadAlertStanding(f"an alert standing cannot be read: {error}") from None
        return cls(channels, heard_ns, ints, floats.reshape(N_FLOATS, width), **rest)


def _read_rest(data: bytes) -> dict[str, Any]:
    if not data:
        return {}
    rest = json.loads(data)
    return {
        "cases": tuple(_case(one) for one in rest["cases"]),
        "shelves": tuple(Shelf(**one) for one in rest["shelves"]),
        "out_of_service": tuple(OutOfService(**one) for one in rest["out_of_service"]),
        "raised": tuple((kind, time_ns) for kind, time_ns in rest["raised"]),
    }


def _case(data: dict[str, Any]) -> Case:
    tally = data["tally"]
    if tally is not None:
        evidence = {
            name: Evidence(one["nats"], Suspect(**one["suspect"]))
            for name, one in tally["evidence"].items()
        }
        crossings = tuple(tally["crossings_ns"])
        tally = Tally(**{**tally, "evidence": evidence, "crossings_ns": crossings})
    return Case(Alert.from_dict(data["alert"]), data["again_ns"], tuple(data["active"]), tally)
