"""What was wrong with a history: counted by reason, listed in a file on request.

A bad row never stops the reading of a file that is mostly good, and is never
silent. One tally serves a whole reading, over all its files.
"""

from __future__ import annotations

import csv
from collections import Counter
from pathlib import Path
from types import TracebackType
from typing import Self, TextIO

from training.history.options import BadHistory

BROKEN_TIME = "broken time"
NO_OFFSET = "time without an offset"
TEXT = "text in a measurement"
WRONG_CELLS = "wrong number of cells"
INFINITE = "infinite number"
NO_SOURCE = "no source"
NO_CHANNEL = "no channel"
UNKNOWN_QUALITY = "unknown quality"
TIME_TWICE = "time twice"

# A cell that someone pasted a page into must not fill the list of bad rows.
MAX_DETAIL_CHARS = 160


class Tally:
    """Counts of one reading of history; a context manager that closes the list of bad rows.

    rejected_path: where to list every bad row (columns file, line, reason, detail), or
        None. The file is written also when no row is bad: it then holds its heading.

    n_rows: rows met, good and bad, without headings and blank lines. In the long form a
        row is one reading.
    rejected: rows not used, by reason.
    first: by reason, the first such row in words.
    outside_span, unknown_words, bad_quality: readings by channel that counted as missing
        because they were outside the instrument's span, or were words that the channel
        table does not list, or were called bad by the history itself.
    """

    def __init__(self, rejected_path: Path | None = None) -> None:
        self.n_rows = 0
        self.rejected: Counter[str] = Counter()
        self.first: dict[str, str] = {}
        self.outside_span: Counter[str] = Counter()
        self.unknown_words: Counter[str] = Counter()
        self.bad_quality: Counter[str] = Counter()
        self._file: TextIO | None = None
        if rejected_path is not None:
            try:
                self._file = rejected_path.open("w", encoding="utf-8", newline="")
            except OSError as error:
                raise BadHistory(
                    str(rejected_path), f"cannot be written: {error.strerror}"
                ) from None
            self._list = csv.writer(self._file, lineterminator="\n")
            self._list.writerow(["file", "line", "reason", "detail"])

    @property
    def n_rejected(self) -> int:
        """Rows not used, for whatever reason."""
        return sum(self.rejected.values())

    def reject(self, file: Path | str, line: int, reason: str, detail: str) -> None:
        """Count one bad row; line is 1-based (in Parquet the number of the row)."""
        self.rejected[reason] += 1
        if len(detail) > MAX_DETAIL_CHARS:
            detail = detail[: MAX_DETAIL_CHARS - 3] + "..."
        self.first.setdefault(reason, f"{file}, line {line}: {detail}")
        if self._file is not None:
            self._list.writerow([str(file), line, reason, detail])

    def take(self, other: Tally) -> None:
        """Add what another tally counted, in files that come after those of this one."""
        self.n_rows += other.n_rows
        for name in ("rejected", "outside_span", "unknown_words", "bad_quality"):
            getattr(self, name).update(getattr(other, name))
        for reason, where in other.first.items():
            self.first.setdefault(reason, where)

    def refuse_if_mostly_bad(self, place: str) -> None:
        """Raise BadHistory when more rows were bad than good."""
        if 2 * self.n_rejected <= self.n_rows:
            return
        reason, n = self.rejected.most_common(1)[0]
        raise BadHistory(
            place,
            f"{self.n_rejected} of {self.n_rows} rows cannot be used, {n} of them for "
            f"{reason!r}; the first is {self.first[reason]}",
        )

    def close(self) -> None:
        """Close the list of bad rows; may be called twice."""
        if self._file is not None:
            self._file.close()
            self._file = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        at: TracebackType | None,
    ) -> None:
        self.close()
