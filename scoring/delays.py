"""What turns an exceeded level into an alert: part of the levels, since they are set with it.

Terms are those of ISA-18.2 / IEC 62682. `steps` are multiples of the usual interval
between two records.
"""

from __future__ import annotations

from pydantic import BaseModel, ConfigDict, Field


class Delays(BaseModel):
    """On-delay, off-delay and deadband; every one has a default that is meant to be kept.

    On-delay. record_run: so many judged records in a row over the record level raise; 1,
    because excess already weighs how odd a record is. sustained_on_steps: time that
    sustained must stay over its level; 0, because sustained is itself a slow mean.
    Off-delay. off_delay_steps: held through shorter returns, so that exceedances closer
    than this are one episode. deadband: share of the way from usual down which sustained
    or excess must return before the off-delay starts.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    record_run: int = Field(default=1, ge=1, le=100_000)
    sustained_on_steps: float = Field(default=0.0, ge=0, le=100_000)
    off_delay_steps: float = Field(default=30.0, ge=0, le=100_000)
    deadband: float = Field(default=0.1, ge=0, le=0.99)


DELAYS = Delays()
