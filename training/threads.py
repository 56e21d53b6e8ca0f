"""Work on slices, on all cores: for compiled kernels that let go of the interpreter.

A kernel compiled with `parallel=True` takes three times as long to compile, which whoever
learns for the first time waits for.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from itertools import pairwise
from typing import Any

# Slices a core: where slices take unlike times, no core waits long for another.
SLICES_A_CORE = 4


def in_slices(n: int, work: Callable[..., None], *arrays: Any) -> None:
    """Call work(start, stop, *arrays) for slices that cover 0 to n, each once, on all cores.

    work: fills what belongs to its slice and nothing else. What it raises is raised here.
    """
    n_cores = os.cpu_count() or 1
    n_slices = max(1, min(n, SLICES_A_CORE * n_cores))
    borders = [n * k // n_slices for k in range(n_slices + 1)]
    if n_cores == 1 or n_slices == 1:
        work(0, n, *arrays)
        return
    with ThreadPoolExecutor(n_cores) as threads:
        running = [threads.submit(work, a, b, *arrays) for a, b in pairwise(borders)]
        for one in running:
            one.result()
