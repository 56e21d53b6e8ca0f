"""What can be said about a history file, and the refusal when it cannot be read."""

from __future__ import annotations

from dataclasses import dataclass
from zoneinfo import ZoneInfo

from scoring.errors import OddbranchError

# Where sources stand unless somebody says otherwise; a history may do without it.
SOURCE_COLUMN = "source"
# The one source of a history that names none.
ONLY_SOURCE = "machine"

# A last value stands in the long form for this many steps, if no age is given: long enough
# to bridge a missed poll or two, too short to hide that an instrument has gone quiet.
DEFAULT_AGE_STEPS = 5


class BadHistory(OddbranchError):
    """History that cannot be used; `place` is a file, or a file and a line."""

    def __init__(self, place: str, what: str) -> None:
        self.place, self.what = place, what
        super().__init__(f"{place}: {what}")


@dataclass(frozen=True, slots=True)
class HistoryOptions:
    """How to read a history; None means: found from the file.

    time, source: names of the columns that hold them.
    channel, value, quality: names of the columns of the long form.
    zone: of local times that carry no offset.
    time_format: as in strptime, for times that are neither RFC 3339 nor DD.MM.YYYY.
    separator: one of `,` `;` tab `|`. decimal: `.` or `,`.
    step_s, age_s: of the long form, in seconds: how far apart its records are, and how
        old a last value may be to count. Found from the file, and 5 steps.
    keep_time_text: let batches carry the times as they were written.
    """

    time: str = "time"
    source: str = SOURCE_COLUMN
    channel: str = "channel"
    value: str = "value"
    quality: str = "quality"
    zone: ZoneInfo | None = None
    time_format: str | None = None
    separator: str | None = None
    decimal: str | None = None
    step_s: float | None = None
    age_s: float | None = None
    keep_time_text: bool = False
