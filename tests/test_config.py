"""What ships as package data is found by name."""

from __future__ import annotations

import tomllib

import pytest

from config import read_shipped, shipped_names
from tests.conftest import ROOT


def test_the_shipped_names_are_the_files_of_the_room() -> None:
    assert shipped_names() == tuple(sorted(p.name for p in (ROOT / "config").glob("*.toml")))


def test_every_shipped_file_is_toml() -> None:
    assert all(isinstance(tomllib.loads(read_shipped(name)), dict) for name in shipped_names())


def test_another_name_is_refused_with_those_there_are() -> None:
    with pytest.raises(FileNotFoundError, match="no shipped file '../pyproject.toml'; there are"):
        read_shipped("../pyproject.toml")
