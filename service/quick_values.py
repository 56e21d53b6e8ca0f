"""Times and numbers from the bytes of JSON, compiled; on anything unusual they give up.

A number comes out as the nearest float64 or not at all.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scoring.compiled import uncounted

Bytes = NDArray[np.uint8]

_POWERS = np.array([10.0**k for k in range(23)])
_ZERO, _NINE, _MINUS, _PLUS, _DOT, _COLON = ord("0"), ord("9"), ord("-"), ord("+"), 46, 58


@uncounted
def _digits(b: Bytes, i: int, n_digits: int) -> int:
    """Return the number that some digits are, or -1."""
    value = 0
    for k in range(i, i + n_digits):
        d = int(b[k]) - _ZERO
        if d < 0 or d > 9:
            return -1
        value = value * 10 + d
    return value


@uncounted
def _days(year: int, month: int, day: int) -> int:
    """Return the days since 1970-01-01, or -1 if the calendar has no such day."""
    leap = year % 4 == 0 and (year % 100 != 0 or year % 400 == 0)
    length = 31
    if month == 2:
        length = 29 if leap else 28
    elif month == 4 or month == 6 or month == 9 or month == 11:
        length = 30
    if day < 1 or day > length:
        return -1
    # Counted from 1 March, so that the day that leap years add is the last of the year.
    y = year - 1 if month <= 2 else year
    m = month + 9 if month <= 2 else month - 3
    return 365 * y + y // 4 - y // 100 + y // 400 + (153 * m + 2) // 5 + day - 1 - 719468


@uncounted
def time_ns(b: Bytes, i: int, stop: int) -> int:
    """Return the nanoseconds since 1970 of an RFC 3339 time, or -1 if it is not plain."""
    if stop - i < 20 or b[i + 4] != _MINUS or b[i + 7] != _MINUS or b[i + 10] != 84:
        return -1
    if b[i + 13] != _COLON or b[i + 16] != _COLON:
        return -1
    year, month, day = _digits(b, i, 4), _digits(b, i + 5, 2), _digits(b, i + 8, 2)
    hour, minute, second = _digits(b, i + 11, 2), _digits(b, i + 14, 2), _digits(b, i + 17, 2)
    if year < 1971 or year > 2261 or month < 1 or month > 12:
        return -1
    if hour < 0 or hour > 23 or minute < 0 or minute > 59 or second < 0 or second > 59:
        return -1
    days = _days(year, month, day)
    if days < 0:
        return -1
    i += 19
    fraction = 0
    if b[i] == _DOT:
        i += 1
        scale = 100_000_000
        first = i
        while i < stop and _ZERO <= b[i] <= _NINE:
            fraction += scale * (int(b[i]) - _ZERO)
            scale //= 10
            i += 1
        if i in (first, stop) or i - first > 9:
            return -1
    seconds = ((days * 24 + hour) * 60 + minute) * 60 + second
    if b[i] == 90 and i + 1 == stop:
        return seconds * 1_000_000_000 + fraction
    if stop - i != 6 or b[i + 3] != _COLON or (b[i] != _PLUS and b[i] != _MINUS):
        return -1
    hours, minutes = _digits(b, i + 1, 2), _digits(b, i + 4, 2)
    if hours < 0 or hours > 23 or minutes < 0 or minutes > 59:
        return -1
    offset = hours * 3600 + minutes * 60
    seconds += offset if b[i] == _MINUS else -offset
    return seconds * 1_000_000_000 + fraction


@uncounted
def _quotient(m: np.uint64, k: int) -> tuple[float, bool]:
    """Return the float64 nearest to m / 10^k for k up to 22, and whether that is certain.

    m is split in two exact parts; the rest of dividing the first is exact (Dekker 1971,
    Numer. Math. 18:224-242), so the sum is known to about 100 bits. Where that lies next
    to the middle between two float64, it is not certain.
    """
    d = _POWERS[k]
    low = np.float64(m & np.uint64(0x7FF))
    high = np.float64(m - (m & np.uint64(0x7FF)))
    q = high / d
    # q * d = p + e without rounding, by splitting both factors in halves of 26 bits.
    s = 134217729.0
    t = s * q
    q1 = t - (t - q)
    q2 = q - q1
    t = s * d
    d1 = t - (t - d)
    d2 = d - d1
    p = q * d
    e = ((q1 * d1 - p) + q1 * d2 + q2 * d1) + q2 * d2
    c = (((high - p) - e) + low) / d
    x = q + c
    off = abs(c - (x - q))
    half = abs(np.nextafter(x, np.inf) - x) / 2
    if x - np.nextafter(x, 0.0) < 2.0 * half:
        # Below a power of two the gap is half as wide, and so is the way to its middle.
        half *= 0.5
    # c is known to some 2^-50 of the gap, far closer than this.
    return x, off < half * (1.0 - 1e-9)


@uncounted
def number(b: Bytes, i: int) -> tuple[float, int]:
    """Return a JSON number from i on and the place after it, or place -1 if it needs care."""
    n = b.shape[0]
    negative = b[i] == _MINUS
    if negative:
        i += 1
    first = i
    m = np.uint64(0)
    n_digits = 0
    while i < n and _ZERO <= b[i] <= _NINE:
        m = m * np.uint64(10) + np.uint64(b[i] - _ZERO)
        # Zeros in front are no digits of m.
        n_digits += 1 if m else 0
        i += 1
    if i == first or (b[first] == _ZERO and i - first > 1):
        return 0.0, -1
    k = 0
    if i < n and b[i] == _DOT:
        i += 1
        first = i
        while i < n and _ZERO <= b[i] <= _NINE:
            m = m * np.uint64(10) + np.uint64(b[i] - _ZERO)
            n_digits += 1 if m else 0
            i += 1
        k = i - first
        if k == 0:
            return 0.0, -1
    if i < n and (b[i] == 101 or b[i] == 69):
        i += 1
        down = i < n and b[i] == _MINUS
        if i < n and (b[i] == _MINUS or b[i] == _PLUS):
            i += 1
        first, exponent = i, 0
        while i < n and _ZERO <= b[i] <= _NINE:
            exponent = exponent * 10 + int(b[i]) - _ZERO
            i += 1
            if i - first > 3:
                return 0.0, -1
        if i == first:
            return 0.0, -1
        k += exponent if down else -exponent
    # Nineteen digits fit into 64 bits, whatever they are.
    if n_digits > 19 or k > 22 or k < -22:
        return 0.0, -1
    small = m <= np.uint64(9007199254740992)
    if small:
        # Both are exact, so one division or product rounds once (Clinger 1990).
        x = np.float64(m) / _POWERS[k] if k >= 0 else np.float64(m) * _POWERS[-k]
    elif k >= 0:
        x, certain = _quotient(m, k)
        if not certain:
            return 0.0, -1
    else:
        return 0.0, -1
    return -x if negative else x, i
