"""Times of things that alternate, and lines of the table that `make bench` prints."""

from __future__ import annotations

import time
from collections.abc import Callable

import click


def best_seconds(
    *jobs: Callable[[], object],
    n_rounds: int = 5,
    clock: Callable[[], float] = time.perf_counter,
) -> list[float]:
    """Return each job's shortest time; rounds alternate, so that all meet the same load.

    clock: time.thread_time for what runs on one core, so that waiting for it is not counted.
    """
    best = [float("inf")] * len(jobs)
    for _ in range(n_rounds):
        for k, job in enumerate(jobs):
            start = clock()
            job()
            best[k] = min(best[k], clock() - start)
    return best


def heading() -> None:
    """Print the table's heading."""
    click.echo(f"\n{'what':<72} {'measured':>14} {'budget':>10}  holds")


def line(what: str, measured: str, budget: str = "-", holds: bool | None = None) -> None:
    """Print one line of the table; a figure without a budget holds nothing."""
    verdict = "" if holds is None else ("yes" if holds else "NO")
    click.echo(f"{what:<72} {measured:>14} {budget:>10}  {verdict}".rstrip())
