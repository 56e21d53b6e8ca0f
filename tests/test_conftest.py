"""A missing program is a skip that says so, and a failure where everything must run."""

from __future__ import annotations

import subprocess
import sys

import pytest

from tests.conftest import machine_python, need_program


def test_a_program_that_is_there_is_given_with_its_path() -> None:
    assert need_program("no-such-program", "sh").endswith("/sh")


def test_a_missing_program_skips_the_test(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("ODDBRANCH_TEST_ALL", raising=False)
    with pytest.raises(pytest.skip.Exception, match="'no-such-program' is not installed"):
        need_program("no-such-program")


def test_a_missing_program_fails_the_test_where_all_must_run(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv("ODDBRANCH_TEST_ALL", "1")
    with pytest.raises(pytest.fail.Exception, match="'no-such-program' is not installed"):
        need_program("no-such-program")


def test_a_python_of_the_machine_is_of_this_version() -> None:
    found = machine_python()
    assert not found.startswith(("/root", "/home"))
    said = subprocess.run([found, "--version"], capture_output=True, text=True, check=True).stdout
    assert said.startswith(f"Python {sys.version_info[0]}.{sys.version_info[1]}.")
