"""Cells to readings: numbers of measurements, words of states."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Mask = NDArray[np.bool_]

# What pyarrow's own parser takes, here for the cells of a column that it refuses as a whole.
_NUMBER = r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$|^[+-]?(?i:nan|inf|infinity)$"
_POINT_NUMBER = r"^[+-]?\d*\.\d+([eE][+-]?\d+)?$"
_COMMA_NUMBER = r"^[+-]?\d*,\d+([eE][+-]?\d+)?$"


@dataclass(frozen=True, slots=True)
class Numbers:
    """A column of measurements: (n,) each; text and infinite are None where there is none.

    values: NaN where the cell is empty, says NaN, or is not usable.
    """

    values: Floats
    text: Mask | None = None
    infinite: Mask | None = None


class NumberReader:
    """Reads cells of measurements of one file, whose decimal mark it finds once.

    decimal: `.` or `,`, or None to find it: then a comma is taken where more cells have
        one than have a point. Thousands marks are not read: the cell is text.
    """

    def __init__(self, decimal: str | None) -> None:
        self.decimal = decimal

    def read(self, column: Any) -> Numbers:
        """Return the numbers in a pyarrow array; raises pa.ArrowInvalid for a type without any."""
        if isinstance(column, pa.DictionaryArray):
            column = column.dictionary_decode()
        text = None
        if pa.types.is_string(column.type) or pa.types.is_large_string(column.type):
            floats, text = self._parse(column)
        elif pa.types.is_boolean(column.type):
            floats = pc.cast(pc.cast(column, pa.uint8()), pa.float64())
        elif is_number(column.type) or pa.types.is_null(column.type):
            floats = pc.cast(column, pa.float64(), safe=False)
        else:
            raise pa.ArrowInvalid(f"{column.type} is no number")
        values = _to_numpy(floats)
        infinite = np.isinf(values)
        if not infinite.any():
            return Numbers(values, text)
        return Numbers(np.where(infinite, np.nan, values), text, infinite)

    def _parse(self, column: Any) -> tuple[Any, Mask | None]:
        if self.decimal is None:
            self.decimal = _find_decimal(column)
        if self.decimal != ",":
            try:
                return pc.cast(column, pa.float64()), None
            except pa.ArrowInvalid:
                pass
        cells = pc.utf8_trim_whitespace(column)
        cells = pc.if_else(pc.equal(cells, ""), None, cells)
        if self.decimal == ",":
            point = pc.match_substring(cells, ".")
            cells = pc.if_else(point, "?", pc.replace_substring(cells, ",", "."))
        is_number_text = pc.match_substring_regex(cells, _NUMBER)
        text = pc.fill_null(pc.invert(is_number_text), False).to_numpy(zero_copy_only=False)
        floats = pc.cast(pc.if_else(is_number_text, cells, None), pa.float64())
        return floats, text if text.any() else None


def is_number(kind: Any) -> bool:
    """True for the Parquet types that hold numbers."""
    types = pa.types
    return bool(types.is_integer(kind) or types.is_floating(kind) or types.is_decimal(kind))


def _to_numpy(floats: Any) -> Floats:
    if floats.null_count:
        floats = pc.fill_null(floats, np.nan)
    return np.array(floats.to_numpy(zero_copy_only=False), dtype=np.float64)


def _find_decimal(column: Any) -> str | None:
    """Return the decimal mark that most cells with one use, None if no cell has one."""
    cells = pc.utf8_trim_whitespace(column)
    n_commas = pc.sum(pc.match_substring_regex(cells, _COMMA_NUMBER)).as_py() or 0
    n_points = pc.sum(pc.match_substring_regex(cells, _POINT_NUMBER)).as_py() or 0
    if n_commas == n_points:
        return None
    return "," if n_commas > n_points else "."


def read_words(column: Any, words: tuple[str, ...]) -> tuple[Floats, int]:
    """Return each cell's index in words, (n,), and how many cells hold none of them.

    NaN for an empty cell, len(words) for a word not listed. A number that is whole is
    compared without its decimals, so that `1`, `1.0` and a Parquet 1 are one word.
    """
    numbers = {word: float(i) for i, word in enumerate(words)}
    if isinstance(column, pa.DictionaryArray):
        column = column.dictionary_decode()
    coded = pc.dictionary_encode(column)
    unknown = float(len(words))
    of_code = []
    for cell in coded.dictionary.to_pylist():
        text = cell_word(cell)
        of_code.append(np.nan if text == "" else numbers.get(text, unknown))
        if of_code[-1] == unknown:
            of_code[-1] = numbers.get(_without_decimals(text), unknown)
    lookup = np.array([*of_code, np.nan])
    codes = pc.fill_null(coded.indices, len(of_code)).to_numpy(zero_copy_only=False)
    values = lookup[codes]
    return values, int(np.count_nonzero(values == unknown))


def cell_word(cell: object) -> str:
    """Return a cell as the word of a state; "" for nothing."""
    if cell is None or cell != cell:
        return ""
    if isinstance(cell, bool):
        return "true" if cell else "false"
    if isinstance(cell, float) and cell.is_integer():
        return str(int(cell))
    return str(cell).strip()


def _without_decimals(text: str) -> str:
    whole, _, decimals = text.replace(",", ".").partition(".")
    return whole if decimals.strip("0") == "" and whole.lstrip("+-").isdigit() else text
