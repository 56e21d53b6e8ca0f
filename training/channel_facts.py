"""What a history shows of one column, gathered batch by batch in bounded memory."""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from training.history.readings import NumberReader, cell_word

Floats = NDArray[np.float64]
Codes = NDArray[np.int32]

# A column with more words than this is remarks, not a state.
MAX_WORDS = 20

# Distinct values are kept for this many sources and up to this many each: enough to see
# the grid that an instrument reads on, which is the same all day long.
MAX_SOURCES = 8
MAX_VALUES = 4096

# A state changes seldom. Of 0 and 1 that change at every fifth reading or more often, a
# counter of events or a noisy bit is likelier.
MIN_STATE_DWELL = 5.0

# Readings lie on a grid when so many gaps between values are whole steps, to so much of a
# step: printed decimals round a converter's steps by less.
GRID_SHARE = 0.97
GRID_TOLERANCE = 0.05


@dataclass(slots=True)
class ColumnFacts:
    """Counts and ranges of one column.

    n_cells: cells met. n_missing: empty ones. n_text, n_infinite: cells that are no usable
    number. words: the texts and how often, at most MAX_WORDS + 1 of them. low, high: of
    the numbers. n_pairs: neighbouring readings of one source; n_same: those alike.
    unreadable: why a column of a type without numbers or words is none, "" otherwise.
    """

    name: str
    n_cells: int = 0
    n_missing: int = 0
    n_text: int = 0
    n_infinite: int = 0
    words: Counter[str] = field(default_factory=Counter)
    low: float = math.inf
    high: float = -math.inf
    whole: bool = True
    steady_step: float | None = None
    n_pairs: int = 0
    n_same: int = 0
    unreadable: str = ""
    values: dict[int, Floats] = field(default_factory=dict)
    n_valued: Counter[int] = field(default_factory=Counter)

    def add(self, column: Any, numbers: NumberReader, codes: Codes) -> None:
        """Take in some cells, (n,), and whose they are, (n,), neighbours of a source in order."""
        self.n_cells += len(column)
        try:
            read = numbers.read(column)
        except pa.ArrowInvalid as error:
            self.unreadable = str(error)
            return
        finite = np.isfinite(read.values)
        n_text = 0 if read.text is None else int(np.count_nonzero(read.text))
        n_infinite = 0 if read.infinite is None else int(np.count_nonzero(read.infinite))
        self.n_text += n_text
        self.n_infinite += n_infinite
        self.n_missing += len(finite) - int(np.count_nonzero(finite)) - n_text - n_infinite
        order = np.argsort(codes, kind="stable")
        mostly_text = n_text > np.count_nonzero(finite)
        if read.text is not None:
            # A state may well have numbers among its words.
            self._add_words(column, read.text | finite if mostly_text else read.text)
        if mostly_text:
            self._add_pairs(_word_codes(column)[order], codes[order])
        elif finite.any():
            self._add_numbers(read.values[order], codes[order])

    def _add_words(self, column: Any, cells: NDArray[np.bool_]) -> None:
        for count in pc.value_counts(column.filter(pa.array(cells))).to_pylist():
            word = cell_word(count["values"])
            if word in self.words or len(self.words) <= MAX_WORDS:
                self.words[word] += count["counts"]

    def _add_pairs(self, ordered: Floats, codes: Codes) -> None:
        pair = (codes[1:] == codes[:-1]) & np.isfinite(ordered[1:]) & np.isfinite(ordered[:-1])
        self.n_pairs += int(np.count_nonzero(pair))
        self.n_same += int(np.count_nonzero(pair & (ordered[1:] == ordered[:-1])))

    def _add_numbers(self, ordered: Floats, codes: Codes) -> None:
        self._add_pairs(ordered, codes)
        finite = np.isfinite(ordered)
        met, of = ordered[finite], codes[finite]
        self.low, self.high = min(self.low, float(met.min())), max(self.high, float(met.max()))
        self.whole = self.whole and bool(np.all(met == np.round(met)))
        steps = np.diff(met)[of[1:] == of[:-1]]
        if len(steps):
            first = float(steps[0]) if self.steady_step is None else self.steady_step
            self.steady_step = first if np.all(steps == first) else 0.0
        for code in np.unique(of).tolist():
            if code < MAX_SOURCES and len(self.values.get(code, ())) < MAX_VALUES:
                mine = met[of == code]
                known = self.values.get(code, np.empty(0))
                self.values[code] = np.unique(np.concatenate([known, mine]))
                self.n_valued[code] += len(mine)

    @property
    def n_filled(self) -> int:
        """Cells that hold something."""
        return self.n_cells - self.n_missing

    @property
    def is_text(self) -> bool:
        """True when most filled cells are no numbers."""
        return 2 * self.n_text > self.n_filled

    @property
    def n_values(self) -> int:
        """Different values seen, a lower bound where there are many."""
        if self.is_text:
            return len(self.words)
        return len(np.unique(np.concatenate([*self.values.values(), np.empty(0)])))

    @property
    def same_share(self) -> float:
        """Share of readings equal to the reading before."""
        return self.n_same / self.n_pairs if self.n_pairs else 0.0

    @property
    def dwell(self) -> float:
        """Mean number of readings between two changes."""
        return self.n_pairs / max(self.n_pairs - self.n_same, 1)

    @property
    def is_few_integers(self) -> bool:
        """True for 0, 1 and 2 only, at least two of them, that stay for a while."""
        in_range = self.whole and self.low >= 0 and self.high <= 2 and self.low < self.high
        return in_range and self.dwell >= MIN_STATE_DWELL

    @property
    def counts_rows(self) -> bool:
        """True when every reading is the same step above the one before it."""
        return bool(self.steady_step) and self.n_pairs > 1

    def resolution(self) -> float | None:
        """Return the step of the grid that the readings lie on; None if they lie on none."""
        steps = [
            find_resolution(values, self.n_valued[code]) for code, values in self.values.items()
        ]
        found = [step for step in steps if step is not None]
        return float(np.median(found)) if 2 * len(found) > len(steps) else None


def _word_codes(column: Any) -> Floats:
    coded = pc.dictionary_encode(column)
    codes = pc.fill_null(pc.cast(coded.indices, pa.float64()), np.nan)
    return np.asarray(codes.to_numpy(zero_copy_only=False), dtype=np.float64)


def find_resolution(values: Floats, n_readings: int) -> float | None:
    """Return the step of the grid that values lie on, None if they lie on none.

    values: (n_values,), different and rising. n_readings: how many readings they come
    from; on a grid values repeat, so that there are at most half as many.
    Tried are the smallest gap between values and wider ones, because one odd value
    between two steps makes the smallest gap too small. The step is then fitted to all gaps.
    """
    if len(values) < 3 or 2 * len(values) > n_readings:
        return None
    gaps = np.diff(values)
    # Two floats of one printed number, after a conversion of units, are no step.
    gaps = gaps[gaps > 1e-9 * max(abs(values[0]), abs(values[-1]))]
    if len(gaps) < 2:
        return None
    for share in (0.0, 0.01, 0.05, 0.2):
        step = float(np.quantile(gaps, share, method="lower"))
        steps = np.round(gaps / step)
        whole = (steps > 0) & (np.abs(gaps / step - steps) <= GRID_TOLERANCE * steps)
        whole &= np.abs(gaps / step - steps) <= 0.25
        if np.mean(whole) >= GRID_SHARE:
            fitted = float(gaps[whole] @ steps[whole] / (steps[whole] @ steps[whole]))
            return _shortest(fitted)
    return None


def _shortest(step: float) -> float:
    """Return the step with as few digits as keep it to a part in 100 000."""
    for digits in range(1, 9):
        short = float(f"{step:.{digits}g}")
        if abs(short - step) <= 1e-5 * step:
            return short
    return float(f"{step:.9g}")
