"""When a level that is exceeded becomes an alert, and when it stops being one.

Terms are those of ISA-18.2 / IEC 62682. Delays that should follow a site's own pace are
in `steps`, multiples of the usual interval between two records; the others in seconds.
"""

from __future__ import annotations

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field

_Steps = Annotated[float, Field(ge=0, le=100_000)]
_Seconds = Annotated[float, Field(ge=0, le=366 * 86_400)]
_Count = Annotated[int, Field(ge=1, le=100_000)]

# Off-delay in usual intervals: exceedances closer than this are one episode, in setting
# levels as in raising alerts.
OFF_DELAY_STEPS = 30.0


class AlertSettings(BaseModel):
    """Settings of the alert episodes; every one has a default that is meant to be kept.

    On-delay. record_run: so many judged records in a row over the record level raise; 1,
    because excess already weighs how odd a record is. sustained_on_steps: time that
    sustained must stay over its level; 0, because sustained is itself a slow mean.
    Off-delay. off_delay_steps: held through shorter returns. deadband: share of the way
    from usual down which sustained or excess must return before the off-delay starts.
    realarm_s: an alert that still stands is raised again after it; 0: never. A day: an
    alarm that stands for longer counts as stale (from memory, ISA-18.2).

    Damping. After repeat_n alerts of one kind at one source within repeat_window_s, the
    next opens without calling anyone, until it has stood for hold_steps.
    chatter_cycles in chatter_window_s (or in 2 * chatter_cycles intervals, if longer):
    three in a minute is the usual criterion for chattering. fleeting_steps: an alert that
    was over its level for no longer, once, was fleeting.

    Kinds apart from the budget. silent_steps, absent_steps: least time without a record,
    or without a channel's reading; longer where the longest normal time away is longer,
    but never beyond away_most_s, so that one long outage in the history does not make the
    watch blind. span_steps: readings outside the span for so long, as after a broken wire.
    stuck_factor: how many times its own longest normal stillness a channel must be still;
    stuck_least_steps: and at least so long. clock_steps: times must go back, or ahead of
    the clock of whoever receives them, for so long. ahead_s: from where that is a fault.

    People. shelve_most_s: no shelf is longer: what is shelved for good is out of service.
    flood_start_n annunciations in flood_window_s start a flood, fewer than flood_end_n in
    flood_window_s end it (ten and five in ten minutes; from memory, ISA-18.2).
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    record_run: _Count = 1
    sustained_on_steps: _Steps = 0.0
    off_delay_steps: _Steps = OFF_DELAY_STEPS
    deadband: float = Field(default=0.1, ge=0, lt=1)
    realarm_s: _Seconds = 86_400.0

    repeat_n: _Count = 3
    repeat_window_s: _Seconds = 3600.0
    hold_steps: _Steps = 6.0
    chatter_cycles: int = Field(default=3, ge=2, le=100)
    chatter_window_s: _Seconds = 60.0
    fleeting_steps: _Steps = 3.0

    silent_steps: _Steps = 30.0
    absent_steps: _Steps = 30.0
    away_factor: float = Field(default=1.5, ge=1, le=100)
    away_most_s: _Seconds = 3600.0
    span_steps: _Steps = 6.0
    stuck_factor: float = Field(default=2.0, ge=1, le=100)
    stuck_least_steps: _Steps = 12.0
    clock_steps: _Steps = 30.0
    ahead_s: _Seconds = 300.0

    shelve_most_s: _Seconds = 7 * 86_400.0
    flood_start_n: _Count = 10
    flood_end_n: _Count = 5
    flood_window_s: _Seconds = 600.0
