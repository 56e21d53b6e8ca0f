"""What is remembered of a source between records, and its bytes."""

from __future__ import annotations

import struct
from dataclasses import dataclass

import numpy as np

from scoring.derived import Carry
from scoring.errors import OddbranchError

# Version of the byte form: little-endian, head then the carried instruments.
STANDING_FORMAT = 1
_HEAD = struct.Struct("<BqdqHB")


class BadStanding(OddbranchError):
    """Bytes that are no standing of this format."""


@dataclass(frozen=True, slots=True)
class Standing:
    """A source's standing.

    model: name of the model it belongs to; time_ns: its last record's time; sustained:
    nats. carry: the last record's instruments where derived channels look back.
    """

    model: str
    time_ns: int
    sustained: float
    carry: Carry | None = None

    def to_bytes(self) -> bytes:
        """Return the byte form; `from_bytes` gives an equal standing."""
        name = self.model.encode()
        carry_ns = self.carry.time_ns if self.carry else -1
        n_carried = len(self.carry.values) if self.carry else 0
        head = _HEAD.pack(
            STANDING_FORMAT, self.time_ns, self.sustained, carry_ns, n_carried, len(name)
        )
        values = self.carry.values.astype("<f8").tobytes() if self.carry else b""
        return head + name + values

    @classmethod
    def from_bytes(cls, data: bytes) -> Standing:
        """Return the standing that `to_bytes` wrote; raises BadStanding."""
        if len(data) < _HEAD.size or data[0] != STANDING_FORMAT:
            raise BadStanding(
                f"a standing of format {data[0] if data else 'none'} was met; "
                f"this version reads format {STANDING_FORMAT}"
            )
        _, time_ns, sustained, carry_ns, n_carried, n_name = _HEAD.unpack_from(data)
        start = _HEAD.size + n_name
        if len(data) != start + 8 * n_carried:
            raise BadStanding(f"a standing of {len(data)} bytes is not whole")
        name = data[_HEAD.size : start].decode()
        values = np.frombuffer(data, dtype="<f8", offset=start).astype(np.float64)
        carry = Carry(carry_ns, values) if n_carried else None
        return cls(name, time_ns, sustained, carry)
