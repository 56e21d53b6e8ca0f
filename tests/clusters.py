"""A Dask scheduler and workers as processes of their own, on this machine alone."""

from __future__ import annotations

import importlib.util
import os
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from tests.conftest import ROOT

PATIENCE_S = 60.0


def need_dask() -> None:
    """Skip where Dask is not installed; fail with ODDBRANCH_TEST_ALL=1, as on the build machine."""
    if importlib.util.find_spec("distributed") is None:
        reason = "library 'distributed' is not installed; it comes with the extra `dev`"
        if os.environ.get("ODDBRANCH_TEST_ALL") == "1":
            pytest.fail(reason)
        pytest.skip(reason)


@contextmanager
def dask_process(folder: Path, *words: str) -> Iterator[subprocess.Popen[bytes]]:
    """Run `dask` with some words until the block ends; what it says goes to a file."""
    with (folder / f"{words[0]}-{time.monotonic_ns()}.log").open("wb") as log:
        process = subprocess.Popen(
            [sys.executable, "-m", "dask", *words, "--host", "127.0.0.1", "--no-dashboard"],
            cwd=ROOT,
            stdout=log,
            stderr=subprocess.STDOUT,
        )
        try:
            yield process
        finally:
            process.kill()
            process.wait()


@contextmanager
def scheduler(folder: Path) -> Iterator[str]:
    """Run a scheduler and give its address."""
    need_dask()
    with dask_process(folder, "scheduler", "--port", "0"):
        (log,) = folder.glob("scheduler-*.log")
        yield _address(log)


def _address(log: Path) -> str:
    until = time.monotonic() + PATIENCE_S
    while time.monotonic() < until:
        for word in log.read_text(encoding="utf-8").split():
            if word.startswith("tcp://127.0.0.1:"):
                return word
        time.sleep(0.05)
    raise AssertionError(f"the scheduler does not say where it is: {log.read_text()}")


@contextmanager
def worker(folder: Path, address: str, name: str) -> Iterator[subprocess.Popen[bytes]]:
    """Run a worker of one thread in one process, which has no guardian that starts it again."""
    more = ("--no-nanny", "--nthreads", "1", "--name", name, "--local-directory", str(folder))
    with dask_process(folder, "worker", address, *more) as process:
        yield process


def slowly(item: Any, work: Callable[[Any], Any]) -> Any:
    """Return work(item), but not at once: time enough to end who does it."""
    time.sleep(1.0)
    return work(item)
