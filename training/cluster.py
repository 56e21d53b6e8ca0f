"""Learning on several machines: the workers of a Dask scheduler have a hand in it.

What is handed out is a source's records, by the name of the file they are in, so a folder that
all machines see is needed. A worker that ends is no harm: the scheduler gives its work to
another, which finds the same.
"""

from __future__ import annotations

import hashlib
import importlib
import importlib.metadata
import platform
import threading
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import CancelledError
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import click

from scoring.errors import OddbranchError
from training.hands import HERE, Counted, Hands, Item, Result, added

# Sources are counted together until they have so many records: at 40 ns a record and pair of
# nodes a part is some seconds of work, and its counts are far smaller than its records.
PART_RECORDS = 2_000_000
# So many counts are added at a time, where they are.
FAN_IN = 8
# Tasks that wait for a worker's thread; more would only fill the scheduler's memory.
WAITING_A_THREAD = 3
# How long a scheduler may take to answer and to have a worker.
PATIENCE_S = 30
# What decides the last digit of a sum of floats beside our own code.
LIBRARIES = ("numpy", "scipy", "numba")

_SCHEDULER = "dask scheduler"

# Kernels use all cores by themselves, and two of them at once in one process is not allowed.
_one_at_a_time = threading.Lock()

cluster_option = click.option(
    "--cluster",
    metavar="ADDRESS",
    help="Learn on the workers of the Dask scheduler there, as in tcp://10.0.0.5:8786. "
    "TMPDIR must name a folder that all of them see.",
)


class NoCluster(OddbranchError):
    """Workers that cannot be had or cannot be used."""

    def __init__(self, place: str, what: str) -> None:
        self.place, self.what = place, what
        super().__init__(f"--cluster {place}: {what}")


@contextmanager
def cluster_at(address: str | None) -> Iterator[Hands]:
    """Give the hands at a scheduler's address, this process's own for None.

    Raises NoCluster if Dask is not installed or nobody answers.
    """
    if address is None:
        yield HERE
        return
    try:
        distributed: Any = importlib.import_module("distributed")
    except ImportError:
        raise NoCluster(
            address, "needs Dask, which is not installed: pip install 'oddbranch[cluster]'"
        ) from None
    try:
        client = distributed.Client(address, timeout=PATIENCE_S, set_as_default=False)
    except (OSError, ValueError, RuntimeError) as error:
        raise NoCluster(
            address, f"no scheduler answers there ({error}); start one with `{_SCHEDULER}`"
        ) from None
    with client:
        try:
            client.wait_for_workers(1, timeout=PATIENCE_S)
        except TimeoutError:
            raise NoCluster(
                address, f"the scheduler has no worker; start some with `dask worker {address}`"
            ) from None
        yield Cluster(address, client, distributed.KilledWorker)


class Cluster:
    """The workers of a scheduler.

    client: Dask's. killed: what it raises for work that ended worker after worker.
    part_records: see PART_RECORDS.
    """

    def __init__(
        self,
        address: str,
        client: Any,
        killed: type[Exception],
        part_records: int = PART_RECORDS,
    ) -> None:
        self.address, self.client = address, client
        self._killed, self.part_records = killed, part_records

    def each(self, work: Callable[[Item], Result], items: Sequence[Item]) -> Iterator[Result]:
        """Yield work(item) of all items in their order, some of them under way meanwhile."""
        waiting: deque[Any] = deque()
        for item in items:
            waiting.append(self._submit(work, item))
            if len(waiting) >= WAITING_A_THREAD * self._n_threads():
                yield self._result(waiting.popleft())
        while waiting:
            yield self._result(waiting.popleft())

    def total(self, work: Callable[[Item], Counted], items: Sequence[Item]) -> Counted:
        """Return the sum of work(item) over all items, added up by the workers as a tree."""
        layer = [self._submit(work, item) for item in items]
        while len(layer) > 1:
            places = range(0, len(layer), FAN_IN)
            layer = [self.client.submit(added, layer[k : k + FAN_IN], pure=False) for k in places]
        found: Counted = self._result(layer[0])
        return found

    def groups(self, sizes: Sequence[int]) -> list[list[int]]:
        """Return neighbours that together have about as many records as a part should."""
        found: list[list[int]] = []
        n = self.part_records
        for place, size in enumerate(sizes):
            if n >= self.part_records:
                found.append([])
                n = 0
            found[-1].append(place)
            n += size
        return found

    def must_see(self, folder: Path) -> None:
        """Raise NoCluster unless every worker sees the folder and runs what this machine runs."""
        here = running()
        try:
            looked = self.client.run(_look, folder)
        except (ImportError, OSError) as error:
            raise NoCluster(
                self.address, f"a worker cannot run oddbranch ({error}); install it there as here"
            ) from None
        for worker, (sees, there) in sorted(looked.items()):
            if not sees:
                raise NoCluster(
                    self.address,
                    f"worker {worker} cannot write to {folder}; set TMPDIR here to a folder that "
                    "all machines see by the same name and the same user may write to",
                )
            unlike = [f"{k} {there.get(k)}, here {v}" for k, v in here.items() if there.get(k) != v]
            if unlike:
                raise NoCluster(
                    self.address,
                    f"worker {worker} runs {'; '.join(unlike)}; the model would depend on who "
                    "learned it, so install the same there",
                )

    def _n_threads(self) -> int:
        return max(1, sum(int(n) for n in self.client.nthreads().values()))

    def _submit(self, work: Callable[[Item], Result], item: Item) -> Any:
        return self.client.submit(_alone, work, item, pure=False)

    def _result(self, future: Any) -> Any:
        try:
            return self._awaited(future)
        except self._killed as error:
            raise NoCluster(
                self.address, f"workers end while they work ({error}); have they memory enough?"
            ) from None
        except (CancelledError, OSError) as error:
            raise NoCluster(
                self.address, f"the work was lost ({error!r}); is the scheduler still there?"
            ) from None

    def _awaited(self, future: Any) -> Any:
        """Return the result; without any worker it would never come, and a night not end."""
        while True:
            try:
                return future.result(timeout=PATIENCE_S)
            except TimeoutError:
                if not self.client.nthreads():
                    raise NoCluster(
                        self.address, "no worker is left; start some and run this again"
                    ) from None


def running() -> dict[str, str]:
    """Return what decides a model's digits: our own code, libraries, the kind of machine."""
    code = hashlib.sha256()
    room = Path(__file__).resolve().parent
    for path in sorted([*room.rglob("*.py"), *(room.parent / "scoring").rglob("*.py")]):
        code.update(path.read_bytes())
    versions = {name: importlib.metadata.version(name) for name in LIBRARIES}
    return {"code": code.hexdigest()[:12], "machine": platform.machine(), **versions}


def _look(folder: Path) -> tuple[bool, dict[str, str]]:
    mark = folder / f"seen-{platform.node()}-{threading.get_ident()}"
    try:
        mark.write_bytes(b"")
        mark.unlink()
    except OSError:
        return False, running()
    return folder.is_dir(), running()


def _alone(work: Callable[[Item], Result], item: Item) -> Result:
    with _one_at_a_time:
        return work(item)
