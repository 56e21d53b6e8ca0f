"""How alerts are raised again, damped and cleared, and when a channel or a source is at fault.

Terms are those of ISA-18.2 / IEC 62682. Delays that should follow a site's own pace are
in `steps`, multiples of the usual interval between two records; the others in seconds.
What levels are set with is in `delays`.
"""

from __future__ import annotations

from typing import Annotated, Self

from pydantic import BaseModel, ConfigDict, Field, model_validator

_Steps = Annotated[float, Field(ge=0, le=100_000)]
_Seconds = Annotated[float, Field(ge=0, le=31_622_400)]
_Count = Annotated[int, Field(ge=1, le=100_000)]
_Factor = Annotated[float, Field(ge=1, le=100)]


class AlertSettings(BaseModel):
    """Settings of the alert episodes; every one has a default that is meant to be kept.

    realarm_s: a day, because an alarm that stands for longer counts as stale. Three cycles
    in a minute are the usual criterion for chattering. A flood starts with ten annunciations
    in ten minutes and ends with fewer than five (all from memory, ISA-18.2). away_most_s: so
    that one long outage in the history does not make the watch blind. shelve_most_s: what is
    shelved for good is out of service.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    realarm_s: _Seconds = Field(
        86_400.0, description="an alert that still stands is raised again after it; 0: never"
    )
    repeat_n: _Count = Field(
        3, description="alerts of a kind at a source after which the next calls nobody at once"
    )
    repeat_window_s: _Seconds = Field(3600.0, description="the time in which those are counted")
    hold_steps: _Steps = Field(
        6.0, description="how long such a next one must stand before it calls, usual intervals"
    )
    chatter_cycles: Annotated[int, Field(ge=2, le=100)] = Field(
        3, description="times that an alert comes and goes, from which it is said to chatter"
    )
    chatter_window_s: _Seconds = Field(
        60.0, description="in so long, or in twice as many usual intervals where that is longer"
    )
    fleeting_steps: _Steps = Field(
        3.0, description="an alert over its level for no longer was fleeting, usual intervals"
    )
    silent_steps: _Steps = Field(
        30.0, description="least time without a record of a source, usual intervals"
    )
    absent_steps: _Steps = Field(
        30.0, description="least time without a channel's reading, usual intervals"
    )
    away_factor: _Factor = Field(
        1.5, description="times the longest normal time away, where that is longer"
    )
    away_most_s: _Seconds = Field(3600.0, description="but no longer than this")
    span_steps: _Steps = Field(
        6.0, description="readings outside the span for so long, usual intervals"
    )
    stuck_factor: _Factor = Field(
        2.0, description="times its longest normal stillness that a channel must be still"
    )
    stuck_least_steps: _Steps = Field(12.0, description="and at least so long, usual intervals")
    clock_steps: _Steps = Field(
        30.0, description="times that go back or lie ahead for so long, usual intervals"
    )
    shelve_most_s: _Seconds = Field(604_800.0, description="no shelf is longer")
    flood_start_n: _Count = Field(10, description="annunciations that start a flood")
    flood_end_n: _Count = Field(5, description="fewer than this end it")
    flood_window_s: _Seconds = Field(600.0, description="the time in which they are counted")

    @model_validator(mode="after")
    def _check_flood(self) -> Self:
        if self.flood_end_n > self.flood_start_n:
            raise ValueError(
                f"flood_end_n = {self.flood_end_n} is more than flood_start_n = "
                f"{self.flood_start_n}, and a flood would end as it starts; lower the one or "
                "raise the other"
            )
        return self
