"""RFC 3339 times to nanoseconds and back.

Many times of the common form are read at once from their bytes; any other form goes
through one careful reader, which is also what the quick one must agree with.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from datetime import UTC, datetime

import numpy as np
from numpy.typing import NDArray

# RFC 3339 section 5.6; the offset is demanded, since a time without one is ambiguous twice a year.
RFC_3339_PATTERN = (
    r"^(\d{4})-(\d\d)-(\d\d)[Tt ](\d\d):(\d\d):(\d\d)(?:\.(\d{1,9})\d*)?([Zz]|[+-]\d\d:\d\d)$"
)
_RFC_3339 = re.compile(RFC_3339_PATTERN, re.ASCII)
_NO_OFFSET = re.compile(r"^\d{4}-\d\d-\d\d[Tt ]\d\d:\d\d(:\d\d(\.\d+)?)?$", re.ASCII)

# Times are int64 nanoseconds: later years do not fit, earlier ones are a dead clock's.
FIRST_YEAR, LAST_YEAR = 1970, 2261

_EXAMPLE = "2026-12-01T04:00:10Z"
_EPOCH_ORDINAL = datetime(1970, 1, 1, tzinfo=UTC).toordinal()
_N_QUICK = len(_EXAMPLE)
_SEPARATORS = {4: b"-", 7: b"-", 10: b"T", 13: b":", 16: b":", 19: b"Z"}
_DIGITS = [i for i in range(_N_QUICK) if i not in _SEPARATORS]


def parse_time(text: str) -> int:
    """Return nanoseconds since 1970 (UTC) of one RFC 3339 time.

    Second 60 (a leap second) is read as the second that follows it. Raises ValueError
    with the reason as a clause.
    """
    match = _RFC_3339.fullmatch(text)
    if match is None:
        if _NO_OFFSET.fullmatch(text):
            raise ValueError(
                f"has no offset from UTC; end it with Z or +hh:mm, for example {_EXAMPLE}"
            )
        raise ValueError(f"is not an RFC 3339 time; send for example {_EXAMPLE}")
    year, month, day, hour, minute, second = map(int, match.groups()[:6])
    fraction, offset = match.group(7), match.group(8)
    if not FIRST_YEAR <= year <= LAST_YEAR:
        raise ValueError(f"lies outside the years {FIRST_YEAR} to {LAST_YEAR}")
    if hour > 23 or minute > 59 or second > 60:
        raise ValueError("names an hour, minute or second that no clock shows")
    try:
        days = datetime(year, month, day, tzinfo=UTC).toordinal() - _EPOCH_ORDINAL
    except ValueError:
        raise ValueError("names a day that is not in the calendar") from None
    seconds = ((days * 24 + hour) * 60 + minute) * 60 + second - _offset_s(offset)
    nanoseconds = seconds * 1_000_000_000 + (int(fraction.ljust(9, "0")) if fraction else 0)
    if nanoseconds < 0:
        raise ValueError(f"lies before {FIRST_YEAR} in UTC")
    return nanoseconds


def _offset_s(offset: str) -> int:
    if offset in "Zz":
        return 0
    hours, minutes = int(offset[1:3]), int(offset[4:6])
    if hours > 23 or minutes > 59:
        raise ValueError("has an offset from UTC that no clock shows")
    seconds = hours * 3600 + minutes * 60
    return -seconds if offset[0] == "-" else seconds


def parse_times(texts: Sequence[str]) -> NDArray[np.int64] | None:
    """Return the nanoseconds of many times of the form 2026-12-01T04:00:10Z at once.

    texts: n strings. Returns (n,) or None where any of them has another form or is no
    time: the caller then takes them one by one through parse_time.
    """
    joined = "".join(texts)
    # Each length counts: a missing Z and a Z too many would cancel out in the sum.
    if set(map(len, texts)) != {_N_QUICK} or not joined.isascii():
        return None
    cells = np.frombuffer(joined.encode("ascii"), dtype=np.uint8).reshape(len(texts), _N_QUICK)
    for place, byte in _SEPARATORS.items():
        if (cells[:, place] != byte[0]).any():
            return None
    digits = cells.astype(np.int64) - ord("0")
    part = digits[:, _DIGITS]
    if ((part < 0) | (part > 9)).any():
        return None
    year = digits[:, 0] * 1000 + digits[:, 1] * 100 + digits[:, 2] * 10 + digits[:, 3]
    month, day, hour, minute, second = (
        digits[:, at] * 10 + digits[:, at + 1] for at in (5, 8, 11, 14, 17)
    )
    in_range = (
        (year >= FIRST_YEAR) & (year <= LAST_YEAR) & (month >= 1) & (month <= 12) & (day >= 1)
        & (day <= 31) & (hour <= 23) & (minute <= 59) & (second <= 59)
    )  # fmt: skip
    if not in_range.all():
        return None
    months = ((year - 1970) * 12 + month - 1).astype("datetime64[M]")
    days = months.astype("datetime64[D]") + (day - 1)
    if (days.astype("datetime64[M]") != months).any():
        return None
    seconds = ((days.astype(np.int64) * 24 + hour) * 60 + minute) * 60 + second
    return np.asarray(seconds * 1_000_000_000, dtype=np.int64)


def format_times(times_ns: NDArray[np.int64]) -> list[str]:
    """Return times as RFC 3339 in UTC with only as many decimals as they need."""
    if len(times_ns) < 8 or (times_ns % 1_000_000_000).any():
        return [format_time(time_ns) for time_ns in times_ns.tolist()]
    moments = times_ns.astype("datetime64[ns]")
    texts: list[str] = np.datetime_as_string(moments, unit="s", timezone="UTC").tolist()
    return texts


def format_time(time_ns: int) -> str:
    """Return one time as RFC 3339 in UTC with only as many decimals as it needs."""
    seconds, fraction = divmod(time_ns, 1_000_000_000)
    text = datetime.fromtimestamp(seconds, UTC).strftime("%Y-%m-%dT%H:%M:%S")
    if not fraction:
        return text + "Z"
    digits = f"{fraction:09d}"
    while digits.endswith("000"):
        digits = digits[:-3]
    return f"{text}.{digits}Z"
