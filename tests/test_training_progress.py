"""A bar on a terminal, nothing in a pipe."""

from __future__ import annotations

import os
import pty
import subprocess
import sys

from tests.conftest import ROOT

CODE = """
from training.progress import Progress
with Progress("reading history", 100) as progress:
    for _ in range(10):
        progress.advance(10)
print("done")
"""


def test_a_pipe_sees_no_bar() -> None:
    done = subprocess.run(
        [sys.executable, "-c", CODE], capture_output=True, text=True, check=True, cwd=ROOT
    )
    assert (done.stdout, done.stderr) == ("done\n", "")


def test_a_terminal_sees_the_bar_on_stderr() -> None:
    ours, theirs = pty.openpty()
    done = subprocess.run(
        [sys.executable, "-c", CODE],
        stdout=subprocess.PIPE,
        stderr=theirs,
        text=True,
        check=True,
        cwd=ROOT,
        env={**os.environ, "TERM": "xterm", "COLUMNS": "80"},
    )
    os.close(theirs)
    seen = os.read(ours, 65_536).decode()
    os.close(ours)
    assert "reading history" in seen
    assert "100%" in seen
    assert done.stdout == "done\n"
