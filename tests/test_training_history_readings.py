"""Cells to numbers and words."""

from __future__ import annotations

import math

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from training.history.readings import NumberReader, cell_word, read_words


def numbers(cells: list[str | None], decimal: str | None = ".") -> list[float | str]:
    """Return each cell's number, or what is wrong with it."""
    read = NumberReader(decimal).read(pa.array(cells, pa.string()))
    found: list[float | str] = []
    for i, value in enumerate(read.values.tolist()):
        text = read.text is not None and read.text[i]
        infinite = read.infinite is not None and read.infinite[i]
        assert not (text or infinite) or math.isnan(value)
        found.append("text" if text else "infinite" if infinite else value)
    return found


@pytest.mark.parametrize("also", [[], ["text"]], ids=["clean column", "column with text"])
@pytest.mark.parametrize(
    ("cell", "number"),
    [
        ("1.5", 1.5),
        ("-1", -1.0),
        ("+.5", 0.5),
        ("5.", 5.0),
        ("1e3", 1000.0),
        ("1E-3", 0.001),
        (" 7 ", 7.0),
        ("inf", "infinite"),
        ("-Infinity", "infinite"),
        ("1e999", "infinite"),
        ("1,5", "text"),
        ("1_000", "text"),
        ("0x10", "text"),
        ("1 000", "text"),
        ("--1", "text"),
        ("off", "text"),
        ("٣", "text"),
    ],
)
def test_a_cell_reads_alike_in_clean_and_troubled_columns(
    cell: str, number: float | str, also: list[str]
) -> None:
    assert numbers([cell, "2", *also]) == [number, 2.0, *also]


@pytest.mark.parametrize("cell", [None, "", "  ", "nan", "NaN"])
def test_an_empty_cell_and_a_written_nan_are_missing(cell: str | None) -> None:
    assert math.isnan(float(numbers([cell, "x"])[0]))


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_every_printed_float_is_read_back_exactly(number: float) -> None:
    assert numbers([repr(number)]) == [number]
    assert numbers([repr(number).replace(".", ",")], ",") == [number]


def test_the_decimal_mark_is_found_once_per_file() -> None:
    reader = NumberReader(None)
    found = []
    for cells in (["1", "2"], ["1,5", "2"], ["1.5", "2,5"]):
        found.append((reader.read(pa.array(cells)), reader.decimal))
    assert [(read.values.tolist(), mark) for read, mark in found[:2]] == [
        ([1.0, 2.0], None),
        ([1.5, 2.0], ","),
    ]
    text = found[2][0].text
    assert text is not None
    assert text.tolist() == [True, False]


def test_thousands_marks_are_text_and_not_guessed_at() -> None:
    assert numbers(["1.234,5", "1,5", "2,5"], None) == ["text", 1.5, 2.5]
    assert numbers(["1,234.5", "1.5"], None) == ["text", 1.5]


def test_most_cells_decide_the_decimal_mark() -> None:
    assert numbers(["1.5", "2.5", "3,5"], None) == [1.5, 2.5, "text"]


def test_integers_beyond_a_floats_precision_are_read_all_the_same() -> None:
    read = NumberReader(None).read(pa.array([2**60 + 1]))
    assert read.values.tolist() == [float(2**60 + 1)]


def test_words_are_numbered_and_others_come_last() -> None:
    column = pa.array([" running", "stopped", "", None, "Running"])
    values, n_unknown = read_words(column, ("running", "stopped"))
    np.testing.assert_array_equal(values, [0, 1, np.nan, np.nan, 2])
    assert n_unknown == 1


@pytest.mark.parametrize("cells", [["1", "0"], ["1.0", "0.0"], ["1,0", "0,00"], [1, 0], [1.0, 0.0]])
def test_whole_numbers_are_one_word_however_written(cells: list[object]) -> None:
    values, n_unknown = read_words(pa.array(cells), ("0", "1"))
    assert (values.tolist(), n_unknown) == ([1.0, 0.0], 0)


def test_a_column_without_a_word_is_missing_throughout() -> None:
    values, n_unknown = read_words(pa.array([None, None], pa.string()), ("0", "1"))
    assert np.isnan(values).all()
    assert n_unknown == 0


@pytest.mark.parametrize(
    ("cell", "word"), [(True, "true"), (2.0, "2"), (2.5, "2.5"), (float("nan"), ""), (None, "")]
)
def test_a_cell_of_any_type_has_a_word(cell: object, word: str) -> None:
    assert cell_word(cell) == word
