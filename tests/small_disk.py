"""A small disk that tests may fill."""

from __future__ import annotations

import subprocess
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path


@contextmanager
def small_disk(folder: Path, size: str) -> Iterator[Callable[[str], None] | None]:
    """Mount a small disk in memory there and yield what resizes it; None where none may be."""
    words = ["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(folder)]
    try:
        subprocess.run(words, capture_output=True, check=True)
    except (OSError, subprocess.CalledProcessError):
        yield None
        return

    def resize(size: str) -> None:
        subprocess.run(["mount", "-o", f"remount,size={size}", str(folder)], check=True)

    try:
        yield resize
    finally:
        subprocess.run(["umount", str(folder)], check=True)
