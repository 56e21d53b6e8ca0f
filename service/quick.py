"""Plain bodies straight from bytes to arrays, by one compiled pass over the JSON.

It takes what nearly every client sends and nothing else: on anything unusual (an escape,
an unknown channel or word, a number that needs care, an error) it gives up, and the
careful reader in `parse` takes the whole body, which is also its twin in the tests.
Numbers come out as the nearest float64, or not at all.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scoring.compiled import uncounted
from service.layout import Layout
from service.quick_values import number, time_ns

Bytes = NDArray[np.uint8]
Ints = NDArray[np.int64]
Floats = NDArray[np.float64]

# What a body is made of; lines hold one record each and nothing runs over their ends.
ONE, ARRAY, LINES = 0, 1, 2
_GIVE_UP = -1
_MAX_SOURCES = 256
_MAX_SOURCE_BYTES = 200
_MAX_ABS_READING = 1e100

_QUOTE, _BACKSLASH, _COLON, _COMMA = ord('"'), ord("\\"), ord(":"), ord(",")
_OPEN, _CLOSE, _LEFT, _RIGHT = ord("{"), ord("}"), ord("["), ord("]")
_NEWLINE = 10


@dataclass(frozen=True)
class Words:
    """Texts laid end to end: text i is pool[start[i]:start[i + 1]]."""

    pool: Bytes
    start: Ints

    @classmethod
    def of(cls, texts: list[bytes]) -> Words:
        """Lay out some texts; the last one is followed by some room."""
        start = np.cumsum([0, *(len(text) for text in texts)])
        pool = np.frombuffer(b"".join(texts) + bytes(8), dtype=np.uint8)
        return cls(pool, start.astype(np.int64))


class QuickParser:
    """Parses plain bodies for one layout; safe to use from several threads."""

    def __init__(self, layout: Layout) -> None:
        self.layout = layout
        names = Words.of([name.encode() for name in layout.names])
        states = [channel.words for channel in layout.channels]
        flat = Words.of([word.encode() for words in states for word in words])
        first = np.cumsum([0, *(len(words) for words in states)]).astype(np.int64)
        is_state = np.array([column in layout.states for column in range(len(states))])
        self._tables = (names.pool, names.start, flat.pool, flat.start, first, is_state)

    def parse(self, body: bytes, form: int) -> tuple[list[str], Ints, Floats] | None:
        """Return sources (n,), times_ns (n,) and values (n, n_channels), or None.

        form: ONE, ARRAY or LINES. None means only that the careful way must be taken.
        """
        if not self.layout.names:
            return None
        cells = np.frombuffer(body, dtype=np.uint8)
        # A plain record has the member once, so memory is asked for no more rows than come.
        n_max = 1 if form == ONE else max(1, body.count(b'"readings"'))
        times = np.empty(n_max, dtype=np.int64)
        codes = np.empty(n_max, dtype=np.int64)
        values = np.full((n_max, len(self.layout.names)), np.nan)
        found_sources = np.empty((_MAX_SOURCES, 2), dtype=np.int64)
        n, n_sources = _parse(cells, form, *self._tables, times, codes, values, found_sources)
        if n <= 0:
            return None
        spans = found_sources[:n_sources].tolist()
        names = [body[start:stop].decode("ascii") for start, stop in spans]
        sources = [names[code] for code in codes[:n].tolist()]
        return sources, times[:n], values[:n]


@uncounted
def _skip(b: Bytes, i: int, form: int) -> int:
    """Return the place of the next byte that is no white space."""
    n = b.shape[0]
    while i < n:
        c = b[i]
        if c == 32 or c == 9 or c == 13 or (c == 10 and form != LINES):
            i += 1
        else:
            break
    return i


@uncounted
def _text_end(b: Bytes, i: int) -> int:
    """Return the place of the quote that ends a text from i on, or -1 if it is not plain.

    Plain is without escapes and control characters.
    """
    n = b.shape[0]
    while i < n:
        c = b[i]
        if c == _QUOTE:
            return i
        if c == _BACKSLASH or c < 32 or c == 127:
            return -1
        i += 1
    return -1


@uncounted
def _same(b: Bytes, start: int, stop: int, pool: Bytes, first: int, last: int) -> bool:
    if stop - start != last - first:
        return False
    for k in range(stop - start):  # noqa: SIM110 - the compiler takes loops, not generators
        if b[start + k] != pool[first + k]:
            return False
    return True


@uncounted
def _find(
    b: Bytes, start: int, stop: int, pool: Bytes, at: Ints, lo: int, hi: int, guess: int
) -> int:
    """Return which text of lo..hi - 1 it is, trying the guess first; -1 if none."""
    if lo <= guess < hi and _same(b, start, stop, pool, at[guess], at[guess + 1]):
        return guess
    for k in range(lo, hi):
        if _same(b, start, stop, pool, at[k], at[k + 1]):
            return k
    return -1


@uncounted
def _readings(
    b: Bytes,
    i: int,
    form: int,
    names: Bytes,
    name_at: Ints,
    words: Bytes,
    word_at: Ints,
    word_of: Ints,
    is_state: NDArray[np.bool_],
    row: Floats,
) -> int:
    """Read the object of readings from after its brace into a row; return the place after."""
    n, n_names = b.shape[0], row.shape[0]
    guess = 0
    i = _skip(b, i, form)
    if i < n and b[i] == _CLOSE:
        return i + 1
    while i < n:
        if b[i] != _QUOTE:
            return _GIVE_UP
        end = _text_end(b, i + 1)
        if end < 0:
            return _GIVE_UP
        column = _find(b, i + 1, end, names, name_at, 0, n_names, guess)
        if column < 0:
            return _GIVE_UP
        guess = column + 1
        i = _skip(b, end + 1, form)
        if i >= n or b[i] != _COLON:
            return _GIVE_UP
        i = _skip(b, i + 1, form)
        if i + 4 >= n:
            return _GIVE_UP
        if b[i] == 110 and b[i + 1] == 117 and b[i + 2] == 108 and b[i + 3] == 108:
            row[column] = np.nan
            i += 4
        elif is_state[column]:
            if b[i] != _QUOTE:
                return _GIVE_UP
            end = _text_end(b, i + 1)
            if end < 0:
                return _GIVE_UP
            lo, hi = word_of[column], word_of[column + 1]
            word = _find(b, i + 1, end, words, word_at, lo, hi, lo)
            if word < 0:
                return _GIVE_UP
            row[column] = word - lo
            i = end + 1
        else:
            value, i = number(b, i)
            if i < 0 or abs(value) > _MAX_ABS_READING:
                return _GIVE_UP
            # Minus zero is zero: the same reading must give the same bytes in the store.
            row[column] = value + 0.0
        i = _skip(b, i, form)
        if i >= n:
            return _GIVE_UP
        if b[i] == _CLOSE:
            return i + 1
        if b[i] != _COMMA:
            return _GIVE_UP
        i = _skip(b, i + 1, form)
    return _GIVE_UP


@uncounted
def _source(b: Bytes, start: int, stop: int, found: Ints, n_sources: int, guess: int) -> int:
    """Return the number of a source among those found, which may be a new one; -1: give up."""
    if stop == start or stop - start > _MAX_SOURCE_BYTES:
        return _GIVE_UP
    if guess < n_sources and _same(b, start, stop, b, found[guess, 0], found[guess, 1]):
        return guess
    for k in range(n_sources):
        if _same(b, start, stop, b, found[k, 0], found[k, 1]):
            return k
    if n_sources == found.shape[0]:
        return _GIVE_UP
    for k in range(start, stop):
        if b[k] >= 128:
            return _GIVE_UP
    found[n_sources, 0], found[n_sources, 1] = start, stop
    return n_sources


@uncounted
def _member(b: Bytes, start: int, stop: int) -> int:
    """Return 0 for source, 1 for time, 2 for readings, else -1."""
    if stop - start == 6 and b[start] == 115 and b[start + 1] == 111 and b[start + 2] == 117:
        return 0 if b[start + 3] == 114 and b[start + 4] == 99 and b[start + 5] == 101 else -1
    if stop - start == 4 and b[start] == 116 and b[start + 1] == 105:
        return 1 if b[start + 2] == 109 and b[start + 3] == 101 else -1
    if stop - start != 8 or b[start] != 114 or b[start + 1] != 101 or b[start + 2] != 97:
        return -1
    if b[start + 3] != 100 or b[start + 4] != 105 or b[start + 5] != 110:
        return -1
    return 2 if b[start + 6] == 103 and b[start + 7] == 115 else -1


@uncounted
def _record(
    b: Bytes,
    i: int,
    form: int,
    names: Bytes,
    name_at: Ints,
    words: Bytes,
    word_at: Ints,
    word_of: Ints,
    is_state: NDArray[np.bool_],
    times: Ints,
    codes: Ints,
    values: Floats,
    found: Ints,
    n_sources: int,
    r: int,
) -> tuple[int, int]:
    """Read a record from after its brace into row r; return the place after and n_sources."""
    n = b.shape[0]
    seen = 0
    i = _skip(b, i, form)
    while i < n and b[i] == _QUOTE:
        end = _text_end(b, i + 1)
        if end < 0:
            return _GIVE_UP, n_sources
        member = _member(b, i + 1, end)
        # A member twice is left to the careful way, like one that is not known.
        if member < 0 or seen & (1 << member):
            return _GIVE_UP, n_sources
        seen |= 1 << member
        i = _skip(b, end + 1, form)
        if i >= n or b[i] != _COLON:
            return _GIVE_UP, n_sources
        i = _skip(b, i + 1, form)
        if i >= n or b[i] != (_OPEN if member == 2 else _QUOTE):
            return _GIVE_UP, n_sources
        if member == 2:
            i = _readings(
                b, i + 1, form, names, name_at, words, word_at, word_of, is_state, values[r]
            )
            if i < 0:
                return _GIVE_UP, n_sources
        else:
            end = _text_end(b, i + 1)
            if end < 0:
                return _GIVE_UP, n_sources
            if member == 0:
                guess = codes[r - 1] + 1 if r else 0
                code = _source(b, i + 1, end, found, n_sources, guess)
                if code < 0:
                    return _GIVE_UP, n_sources
                codes[r] = code
                n_sources = max(n_sources, code + 1)
            else:
                times[r] = time_ns(b, i + 1, end)
                if times[r] < 0:
                    return _GIVE_UP, n_sources
            i = end + 1
        i = _skip(b, i, form)
        if i < n and b[i] == _CLOSE and seen == 7:
            return i + 1, n_sources
        if i >= n or b[i] != _COMMA:
            return _GIVE_UP, n_sources
        i = _skip(b, i + 1, form)
    return _GIVE_UP, n_sources


@uncounted
def _parse(
    b: Bytes,
    form: int,
    names: Bytes,
    name_at: Ints,
    words: Bytes,
    word_at: Ints,
    word_of: Ints,
    is_state: NDArray[np.bool_],
    times: Ints,
    codes: Ints,
    values: Floats,
    found: Ints,
) -> tuple[int, int]:
    """Fill the arrays; return the number of records and of sources, or -1 to give up."""
    n, n_max = b.shape[0], times.shape[0]
    r = n_sources = 0
    i = _skip(b, 0, form)
    if form == ARRAY:
        if i >= n or b[i] != _LEFT:
            return _GIVE_UP, 0
        i = _skip(b, i + 1, form)
    while i < n and b[i] == _OPEN and r < n_max:
        i, n_sources = _record(
            b,
            i + 1,
            form,
            names,
            name_at,
            words,
            word_at,
            word_of,
            is_state,
            times,
            codes,
            values,
            found,
            n_sources,
            r,
        )
        if i < 0:
            return _GIVE_UP, 0
        r += 1
        i = _skip(b, i, form)
        if form == ARRAY:
            if i < n and b[i] == _COMMA:
                i = _skip(b, i + 1, form)
                continue
            if i < n and b[i] == _RIGHT:
                i = _skip(b, i + 1, form)
                return (r, n_sources) if i == n else (_GIVE_UP, 0)
            return _GIVE_UP, 0
        if i == n:
            return r, n_sources
        if form == ONE or b[i] != _NEWLINE:
            return _GIVE_UP, 0
        i = _skip(b, i + 1, form)
    return (r, n_sources) if form == LINES and i == n and r else (_GIVE_UP, 0)


def warm(layout: Layout) -> None:
    """Compile or load the kernels for the three forms."""
    parser: Any = QuickParser(layout)
    for body, form in ((b"{}", ONE), (b"[]", ARRAY), (b"\n", LINES)):
        parser.parse(body, form)
