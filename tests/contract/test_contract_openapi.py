"""Requests made from the OpenAPI description, with all checks of the generator on.

Positive and negative data, missing and doubled headers, unknown methods: every answer must
be one that is described, and nothing may be a 500.
"""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

from tests.service_http import serving

CONFIG = Path(__file__).with_name("schemathesis.toml")


def generate(folder: Path, n_examples: int) -> str:
    """Run the generator against a server of its own and return what it printed."""
    # A small array, so that generated ones reach the limit too.
    with serving(folder, "limits.n_batch=20", "limits.n_sources=100000") as server:
        done = subprocess.run(
            [Path(sys.executable).with_name("schemathesis"), "--config-file", CONFIG,
             "run", f"{server.url}/openapi.json",
             "--checks", "all", "--max-examples", str(n_examples), "--no-color",
             "--generation-deterministic", "--request-timeout", "10"],
            cwd=folder, capture_output=True, text=True, timeout=600, check=False,
        )  # fmt: skip
        log = server.log_text()
    assert done.returncode == 0, done.stdout[-6000:]
    assert '"event":"fault"' not in log
    return done.stdout


def check(output: str, at_least: int) -> None:
    """Every operation was tried, and enough requests were made."""
    assert "Selected: 19/19" in output
    assert "Tested: 19" in output
    found = re.search(r"(\d+) generated, \d+ passed", output)
    assert found, output[-2000:]
    assert int(found.group(1)) >= at_least


def test_every_generated_request_is_answered_as_described(tmp_path: Path) -> None:
    check(generate(tmp_path, 15), 300)


@pytest.mark.soak
def test_thousands_of_generated_requests_are_answered_as_described(tmp_path: Path) -> None:
    check(generate(tmp_path, 500), 2000)
