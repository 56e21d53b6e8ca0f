"""Bad rows for an export, at known lines, to try how a reader takes them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np

from training.plant.utility import BadPlant


@dataclass(frozen=True, slots=True)
class BadRow:
    """One planted row: its line in the file, counted from 1, and what is wrong with it."""

    line: int
    problem: str


def _broken_time(cells: list[str]) -> list[str]:
    return [f"{cells[0][:4]}-99-99 noon", *cells[1:]]


def _text_in_measurement(cells: list[str]) -> list[str]:
    return [*cells[:2], "#REF!", *cells[3:]]


def _wrong_number_of_cells(cells: list[str]) -> list[str]:
    return cells[:-2]


def _infinite_number(cells: list[str]) -> list[str]:
    return [*cells[:2], "inf", *cells[3:]]


def _time_twice(cells: list[str]) -> list[str]:
    return cells


PROBLEMS: Final[dict[str, Callable[[list[str]], list[str]]]] = {
    "broken time": _broken_time,
    "text in a measurement": _text_in_measurement,
    "wrong number of cells": _wrong_number_of_cells,
    "infinite number": _infinite_number,
    "time twice": _time_twice,
}


def spoil_csv(
    path: Path, spoilt: Path, n_bad: int, seed: int, separator: str = ","
) -> tuple[BadRow, ...]:
    """Copy a wide CSV and add n_bad bad rows, each right after the good row it is made of.

    Problems take turns. The file is read line by line, twice.
    Returns the planted rows in order. Raises BadPlant if the file has too few records.
    """
    with path.open(encoding="utf-8", newline="") as file:
        n_records = sum(1 for _ in file) - 1
    if n_bad > n_records:
        raise BadPlant(f"{path}: {n_records} records cannot carry {n_bad} bad rows")
    rng = np.random.default_rng(seed)
    after = {int(line) + 2 for line in rng.choice(n_records, n_bad, replace=False)}
    names = list(PROBLEMS)
    planted: list[BadRow] = []
    with (
        path.open(encoding="utf-8", newline="") as good,
        spoilt.open("w", encoding="utf-8", newline="") as out,
    ):
        for number, line in enumerate(good, start=1):
            out.write(line)
            if number in after:
                name = names[len(planted) % len(names)]
                cells = PROBLEMS[name](line.rstrip("\n").split(separator))
                out.write(separator.join(cells) + "\n")
                planted.append(BadRow(number + len(planted) + 1, name))
    return tuple(planted)
