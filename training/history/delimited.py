"""Text files of cells: `,` `;` tab or `|`, quoted or not, in UTF-8, UTF-16 or Latin-1.

A row is a line: a line break inside quotes ends the row. Blocks of whole lines without
quotes and blank lines go through pyarrow's parser; others take a careful way, line by
line, to the same result. Neither pads nor drops a row with the wrong number of cells.
"""

from __future__ import annotations

import codecs
import csv
import zlib
from collections import Counter
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
import pyarrow as pa
import pyarrow.csv

from training.history.cells import CellBatch
from training.history.files import open_text_bytes
from training.history.options import BadHistory, HistoryOptions

SEPARATORS = (",", ";", "\t", "|")

# Big enough that the parser's start-up is lost in it, small enough that a batch of
# strings and numbers stays far below a model's own memory.
BLOCK_BYTES = 4 * 1024 * 1024

# A row of 5 000 channels is under 100 KB; no line break in this many bytes is no table.
MAX_LINE_BYTES = 16 * 1024 * 1024

N_SAMPLE_LINES = 50


class DelimitedFile:
    """A text history with its heading read; see CellFile."""

    def __init__(self, path: Path, options: HistoryOptions) -> None:
        self.path = path
        with open_text_bytes(path) as (stream, _):
            block = next(self._blocks(stream), b"")
        lines = block.decode().split("\n")
        first = next((i for i, line in enumerate(lines) if line.strip()), None)
        if first is None:
            raise BadHistory(str(path), "empty file; a history has a heading and rows")
        hint = _separator_hint(lines[first])
        if hint:
            first += 1
        sample = [line for line in lines[first : first + N_SAMPLE_LINES] if line.strip()]
        self.separator = options.separator or hint or find_separator(sample)
        self._n_heading_lines = first + 1
        heading = next(csv.reader(sample[:1], delimiter=self.separator), [])
        self._cells = tuple(name.strip() for name in heading)
        self.names = tuple(name for name in self._cells if name)
        refuse_twice(path, self.names)

    def batches(self, columns: Sequence[str]) -> Iterator[CellBatch]:
        """Yield the rows of the file in blocks, with the columns asked for."""
        line = self._n_heading_lines
        heading_left = self._n_heading_lines
        n_read = 0
        with open_text_bytes(self.path) as (stream, raw):
            for block in self._blocks(stream):
                if heading_left:
                    block = b"\n".join(block.split(b"\n", heading_left)[heading_left:])
                    heading_left = 0
                n_bytes = raw.tell() - n_read
                n_read += n_bytes
                yield self._parse(block, line, columns, n_bytes)
                line += block.count(b"\n")

    def _blocks(self, stream: BinaryIO) -> Iterator[bytes]:
        """Yield whole lines as UTF-8 with `\\n` at the end of each."""
        recode = _Recoder(self.path)
        rest = b""
        try:
            while chunk := stream.read(BLOCK_BYTES):
                chunk = rest + recode(chunk)
                cut = chunk.rfind(b"\n") + 1
                if not cut and len(chunk) > MAX_LINE_BYTES:
                    raise BadHistory(str(self.path), f"no line break in {len(chunk)} bytes")
                if cut:
                    yield _tidy(chunk[:cut])
                rest = chunk[cut:]
        except (EOFError, zlib.error, OSError) as error:
            raise BadHistory(str(self.path), f"cannot be read to its end: {error}") from None
        if rest:
            yield _tidy(rest + b"\n")

    def _parse(self, block: bytes, line: int, columns: Sequence[str], n_bytes: int) -> CellBatch:
        batch = None
        if b'"' not in block and b"\n\n" not in block and not block.startswith(b"\n"):
            batch = self._parse_plain(block, line, columns, n_bytes)
        return batch or self._parse_careful(block, line, columns, n_bytes)

    def _parse_plain(
        self, block: bytes, line: int, columns: Sequence[str], n_bytes: int
    ) -> CellBatch | None:
        """Parse a block that has neither quotes nor blank lines; None if it has after all."""
        wrong: list[Any] = []

        def note_wrong(row: Any) -> str:
            wrong.append(row)
            return "skip"

        names = [str(i) for i in range(len(self._cells))]
        try:
            table = pyarrow.csv.read_csv(
                pa.BufferReader(block),
                pyarrow.csv.ReadOptions(
                    column_names=names, use_threads=False, block_size=len(block) + 1
                ),
                pyarrow.csv.ParseOptions(
                    delimiter=self.separator,
                    quote_char=False,
                    ignore_empty_lines=False,
                    invalid_row_handler=note_wrong,
                ),
                pyarrow.csv.ConvertOptions(
                    include_columns=[str(self._cells.index(name)) for name in columns],
                    column_types=dict.fromkeys(names, pa.string()),
                    strings_can_be_null=True,
                    null_values=[""],
                ),
            )
        except pa.ArrowInvalid:
            return None
        n = table.num_rows + len(wrong)
        if n != block.count(b"\n") or any(not row.text.strip() for row in wrong):
            return None
        cells = {name: table.column(i).combine_chunks() for i, name in enumerate(columns)}
        met = {row.number - 1: row.actual_columns for row in wrong}
        if met:
            good = np.delete(np.arange(n), list(met))
            place = np.full(n, -1)
            place[good] = np.arange(len(good))
            index = pa.array(place, mask=place < 0)
            cells = {name: column.take(index) for name, column in cells.items()}
        lines = np.arange(line + 1, line + 1 + n)
        return CellBatch(self.path, lines, cells, n_bytes, len(names), met)

    def _parse_careful(
        self, block: bytes, line: int, columns: Sequence[str], n_bytes: int
    ) -> CellBatch:
        texts = block.decode().split("\n")[:-1]
        rows: list[list[str]] = []
        lines: list[int] = []
        met: dict[int, int] = {}
        for number, cells in enumerate(_split_lines(texts, self.separator), start=line + 1):
            if len(cells) < 2 and not "".join(cells).strip():
                continue
            if len(cells) != len(self._cells):
                met[len(rows)] = len(cells)
                cells = [""] * len(self._cells)
            rows.append(cells)
            lines.append(number)
        places = [self._cells.index(name) for name in columns]
        columns_of_cells = {
            name: pa.array([row[place] or None for row in rows], pa.string())
            for name, place in zip(columns, places, strict=True)
        }
        return CellBatch(
            self.path,
            np.array(lines, dtype=np.int64),
            columns_of_cells,
            n_bytes,
            len(self._cells),
            met,
        )


def _split_lines(texts: list[str], separator: str) -> list[list[str]]:
    """Return the cells of every line, an open quote ending with its line."""
    try:
        rows = list(csv.reader(texts, delimiter=separator))
        if len(rows) == len(texts):
            return rows
    except csv.Error:
        pass
    return [_split_line(text, separator) for text in texts]


def _split_line(text: str, separator: str) -> list[str]:
    try:
        return next(csv.reader([text], delimiter=separator), [])
    except csv.Error:
        # Only a cell beyond the library's size limit gets here: no row of a history.
        return [text]


class _Recoder:
    """Turns chunks of a file into UTF-8; the first chunk tells from what."""

    def __init__(self, path: Path) -> None:
        self._path = path
        self._decoder: codecs.IncrementalDecoder | None = None
        self._started = False
        self._only_returns = False

    def __call__(self, chunk: bytes) -> bytes:
        if not self._started:
            self._started = True
            chunk = self._begin(chunk)
        if self._decoder is not None:
            chunk = self._decoder.decode(chunk).encode()
        return chunk.replace(b"\r", b"\n") if self._only_returns else chunk

    def _begin(self, chunk: bytes) -> bytes:
        for mark, name in ((codecs.BOM_UTF16_LE, "utf-16-le"), (codecs.BOM_UTF16_BE, "utf-16-be")):
            if chunk.startswith(mark):
                self._decoder = codecs.getincrementaldecoder(name)(errors="replace")
                return chunk[len(mark) :]
        if b"\0" in chunk:
            raise BadHistory(str(self._path), "is neither text nor Parquet")
        self._only_returns = b"\n" not in chunk and b"\r" in chunk
        return chunk.removeprefix(codecs.BOM_UTF8)


def _tidy(block: bytes) -> bytes:
    """Return the block in UTF-8 with one kind of line end; what is not UTF-8 is Latin-1."""
    if b"\r" in block:
        block = block.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    if block.isascii():
        return block
    try:
        block.decode()
    except UnicodeDecodeError:
        return block.decode("latin-1").encode()
    return block


def _separator_hint(line: str) -> str:
    """Return the separator that a spreadsheet's first line `sep=;` states, or ""."""
    line = line.strip().strip('"')
    return line[4] if len(line) == 5 and line.startswith("sep=") else ""


def find_separator(lines: list[str]) -> str:
    """Return the separator of some lines, the heading first.

    It is the one by which most lines have as many cells as the heading, and of equals
    the one that gives most cells; `,` where none gives more than one.
    """

    def standing(separator: str) -> tuple[int, int]:
        widths = [len(_split_line(line, separator)) for line in lines]
        return (Counter(widths)[widths[0]], widths[0]) if widths and widths[0] > 1 else (0, 0)

    return max(SEPARATORS, key=standing)


def refuse_twice(path: Path, names: Sequence[str]) -> None:
    """Raise BadHistory when two columns have one name."""
    twice = [name for name, n in Counter(names).items() if n > 1]
    if twice:
        raise BadHistory(str(path), f"column {twice[0]!r} stands twice in the heading")
