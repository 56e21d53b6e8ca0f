"""Times of history to nanoseconds since 1970 (UTC).

Read are RFC 3339 (a blank for the T, and seconds left out, are taken too), DD.MM.YYYY
with a time of day, a format given as in strptime, and Parquet timestamps. Local times
need a zone. At a change of clocks, the hour that exists twice is taken as its first
pass until the times of the same source step back, then as its second; a time that
never was is broken. A second 60 is the second after 59.
"""

from __future__ import annotations

import calendar
import re
from datetime import UTC, datetime, timedelta
from typing import Any, NamedTuple
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from training.history.options import HistoryOptions
from training.history.tally import BROKEN_TIME, NO_OFFSET

Int64 = NDArray[np.int64]
Codes = NDArray[np.int32] | NDArray[np.int64]

# Stands for a broken time; numpy's own "not a time".
NO_TIME = np.iinfo(np.int64).min

NS_PER_S = 1_000_000_000

# Clocks change at full quarters of an hour wherever they have since 1970.
QUARTER_NS = 900 * NS_PER_S

_DATE_TIME = r"\d{4}-\d{2}-\d{2}[Tt ]\d{2}:\d{2}(:\d{2}(\.\d+)?)?"
_OFFSET = r" ?([Zz]|[+-]\d{2}(:?\d{2})?)"
_ZONED_TEXT = f"^{_DATE_TIME}{_OFFSET}$"
_LOCAL_TEXT = f"^{_DATE_TIME}$"
_DOTTED = r"^(\d{2})\.(\d{2})\.(\d{4})[T ](\d{2}:\d{2}(:\d{2})?)([.,](\d+))?"
_PARTS = re.compile(
    r"(\d{4})-(\d\d)-(\d\d)T(\d\d):(\d\d)(?::(\d\d)(?:\.(\d+))?)?(?:Z|([+-])(\d\d):?(\d\d)?)?"
)


class BadTime(NamedTuple):
    """A row whose time cannot be used."""

    row: int
    reason: str
    detail: str


class TimeReader:
    """Reads the time cells of one file; remembers each source's pass of a doubled hour."""

    def __init__(self, options: HistoryOptions) -> None:
        self._zone = options.zone
        self._format = options.time_format
        self._passes: dict[int, tuple[int, bool]] = {}

    def read(self, column: Any, source_codes: Codes) -> tuple[Int64, list[BadTime]]:
        """Return (n,) times, NO_TIME where broken, and the broken ones.

        column: a pyarrow array of n time cells. source_codes: (n,), any numbers that
        tell the sources apart.
        """
        if isinstance(column, pa.DictionaryArray):
            column = column.dictionary_decode()
        if pa.types.is_timestamp(column.type) or pa.types.is_date(column.type):
            return self._read_stamps(column, source_codes)
        texts = column if pa.types.is_string(column.type) else pc.cast(column, pa.string())
        if self._format is not None:
            return self._read_format(texts, source_codes)
        try:
            times = _stamps_to_ns(pc.cast(texts, pa.timestamp("ns", "UTC")))
        except pa.ArrowInvalid:
            return self._read_mixed(texts, source_codes)
        empty = np.flatnonzero(times == NO_TIME)
        return times, [BadTime(int(row), BROKEN_TIME, "the time is empty") for row in empty]

    def _read_stamps(self, column: Any, codes: Codes) -> tuple[Int64, list[BadTime]]:
        zoned = getattr(column.type, "tz", None) is not None
        kind = pa.timestamp("ns", "UTC") if zoned else pa.timestamp("ns")
        try:
            times = _stamps_to_ns(pc.cast(column, kind))
        except pa.ArrowInvalid:
            # A stamp outside the years that 64-bit nanoseconds reach, 1677 to 2262.
            cells = [_pinned(cell) for cell in pc.cast(column, pa.timestamp("us")).to_pylist()]
            times = _stamps_to_ns(pa.array(cells, pa.timestamp("ns")))
        texts = pc.cast(column, pa.string())
        return self._finish(times, np.full(len(times), not zoned), texts, codes)

    def _read_format(self, texts: Any, codes: Codes) -> tuple[Int64, list[BadTime]]:
        assert self._format is not None
        zoned = "%z" in self._format
        parsed = pd.to_datetime(
            texts.to_pandas().str.strip(), format=self._format, errors="coerce", utc=zoned
        )
        micros = np.array(parsed.dt.tz_localize(None).astype("datetime64[us]").astype("int64"))
        in_reach = (micros > NO_TIME // 1000) & (micros < -(NO_TIME // 1000))
        times = np.where(in_reach, micros * 1000, NO_TIME)
        return self._finish(times, np.full(len(times), not zoned), texts, codes)

    def _read_mixed(self, texts: Any, codes: Codes) -> tuple[Int64, list[BadTime]]:
        cells = pc.utf8_trim_whitespace(pc.fill_null(texts, ""))
        cells = pc.replace_substring_regex(cells, _DOTTED, r"\3-\2-\1T\4.\7")
        cells = pc.replace_substring_regex(cells, r"\.( ?[Zz+-]|$)", r"\1")
        zoned = _mask(pc.match_substring_regex(cells, _ZONED_TEXT))
        local = _mask(pc.match_substring_regex(cells, _LOCAL_TEXT))
        cells = pc.replace_substring(pc.utf8_upper(cells), " ", "T", max_replacements=1)
        cells = pc.replace_substring(cells, " ", "")
        times = np.full(len(texts), NO_TIME)
        times[zoned] = _texts_to_ns(cells.filter(pa.array(zoned)), pa.timestamp("ns", "UTC"))
        times[local] = _texts_to_ns(cells.filter(pa.array(local)), pa.timestamp("ns"))
        return self._finish(times, local, texts, codes)

    def _finish(
        self, times: Int64, local: NDArray[np.bool_], texts: Any, codes: Codes
    ) -> tuple[Int64, list[BadTime]]:
        """Turn local times to UTC and name the broken ones."""
        broken = times == NO_TIME
        bad = [
            BadTime(int(row), BROKEN_TIME, _why(texts, int(row))) for row in np.flatnonzero(broken)
        ]
        rows = np.flatnonzero(local & ~broken)
        if not len(rows):
            return times, bad
        if self._zone is None:
            naive = _rows(local & ~broken)
            bad += [BadTime(r, NO_OFFSET, f"time {_text(texts, r)!r}") for r in naive]
            times[rows] = NO_TIME
            return times, bad
        times[rows], never = self._to_utc(times[rows], codes[rows], self._zone)
        bad += [
            BadTime(
                int(r), BROKEN_TIME, f"time {_text(texts, int(r))!r} never was in {self._zone.key}"
            )
            for r in rows[never]
        ]
        return times, bad

    def _to_utc(
        self, local: Int64, codes: Codes, zone: ZoneInfo
    ) -> tuple[Int64, NDArray[np.bool_]]:
        quarters, of_row = np.unique(local // QUARTER_NS, return_inverse=True)
        offsets = np.array([_offsets_ns(int(quarter), zone) for quarter in quarters])
        first, second = offsets[of_row, 0], offsets[of_row, 1]
        times = local - first
        for row in np.flatnonzero(first > second):
            if self._in_second_pass(int(codes[row]), int(local[row])):
                times[row] = local[row] - second[row]
        never = first < second
        times[never] = NO_TIME
        return times, never

    def _in_second_pass(self, code: int, local_ns: int) -> bool:
        """Tell whether a time of a doubled hour is its second pass, and remember it."""
        last_ns, second = self._passes.get(code, (NO_TIME, False))
        if local_ns - last_ns > 86_400 * NS_PER_S:
            second = False  # another year's change of clocks
        second = second or local_ns < last_ns
        self._passes[code] = (local_ns, second)
        return second


def _offsets_ns(quarter: int, zone: ZoneInfo) -> tuple[int, int]:
    local = datetime(1970, 1, 1) + timedelta(seconds=quarter * 900)  # noqa: DTZ001 - a local time
    passes = (local.replace(tzinfo=zone, fold=0), local.replace(tzinfo=zone, fold=1))
    first, second = (int((p.utcoffset() or timedelta()).total_seconds()) for p in passes)
    return first * NS_PER_S, second * NS_PER_S


def _rows(mask: NDArray[np.bool_]) -> list[int]:
    return [int(row) for row in np.flatnonzero(mask)]


def _mask(column: Any) -> NDArray[np.bool_]:
    return np.asarray(column.to_numpy(zero_copy_only=False), dtype=np.bool_)


def _stamps_to_ns(stamps: Any) -> Int64:
    numbers = pc.fill_null(pc.cast(stamps, pa.int64()), int(NO_TIME))
    return np.array(numbers.to_numpy(zero_copy_only=False), dtype=np.int64)


def _pinned(cell: datetime | None) -> datetime | None:
    return cell if cell is not None and 1678 <= cell.year <= 2261 else None


def _texts_to_ns(cells: Any, kind: Any) -> Int64:
    try:
        return _stamps_to_ns(pc.cast(cells, kind))
    except pa.ArrowInvalid:
        return np.array([parse_time(cell) for cell in cells.to_pylist()], dtype=np.int64)


def parse_time(text: str) -> int:
    """Return one time in nanoseconds since 1970, NO_TIME if there is no such time.

    text: as RFC 3339 writes it; without an offset it is taken as UTC.
    """
    met = _PARTS.fullmatch(text.strip().upper().replace(" ", "T", 1))
    if met is None:
        return NO_TIME
    year, month, day, hour, minute = (int(part) for part in met.groups()[:5])
    second, fraction = int(met[6] or 0), (met[7] or "")[:9].ljust(9, "0")
    offset_s = (int(met[9] or 0) * 3600 + int(met[10] or 0) * 60) * (-1 if met[8] == "-" else 1)
    if second > 60 or int(met[9] or 0) > 23 or int(met[10] or 0) > 59:
        return NO_TIME
    try:
        stamp = datetime(year, month, day, hour, minute, min(second, 59), tzinfo=UTC)
    except ValueError:
        return NO_TIME
    if not 1678 <= year <= 2261:
        return NO_TIME
    seconds = calendar.timegm(stamp.timetuple()) + (second == 60) - offset_s
    return seconds * NS_PER_S + int(fraction)


def _text(texts: Any, row: int) -> str:
    return str(texts[row].as_py() or "")


def _why(texts: Any, row: int) -> str:
    text = _text(texts, row)
    return (
        f"time {text!r} is not one of RFC 3339 or --time-format"
        if text.strip()
        else "the time is empty"
    )
