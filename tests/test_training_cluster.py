"""Who learned a model is not to be seen in it; and a cluster that cannot be used is refused."""

from __future__ import annotations

import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from click.testing import CliRunner, Result

from scoring.artefact import read_model, write_model
from scoring.channels import ChannelTable, load_channels
from tests.clusters import need_dask, scheduler, slowly, worker
from tests.night_site import N_RECORDS, last_night, some_records, write_site
from tests.night_site import SOURCES as NIGHT_SOURCES
from tests.plant_files import CHANNELS, records
from tests.service_http import running
from tests.spools import times
from training import cluster as cluster_module
from training.cluster import Cluster, NoCluster, cluster_at
from training.hands import HERE, Hands
from training.history.options import HistoryOptions
from training.history.spool import spool_history
from training.learn import learn_command, learn_model
from training.nightly import nightly_command
from training.settings import LearnSettings

# The last has too few records for a member of its own.
SOURCES = {"east": 400, "mill": 380, "north": 370, "south": 390, "west": 60}
# Parts of about two sources, so that there is something to add up.
PART_RECORDS = 700


@dataclass(frozen=True)
class History:
    """A Parquet data set of three files, and its channels."""

    folder: Path
    channels: Path

    @property
    def table(self) -> ChannelTable:
        """The channel table."""
        return load_channels(self.channels)


@pytest.fixture(scope="module")
def history(tmp_path_factory: pytest.TempPathFactory) -> History:
    """Write the history; every source is in every file, and the files are not in order of time."""
    folder = tmp_path_factory.mktemp("history")
    (folder / "data").mkdir()
    # With regimes: the site says nothing of them, so that one is tried.
    (folder / "channels.toml").write_text(CHANNELS.replace("regime = []\n", ""), encoding="utf-8")
    parts: list[list[dict[str, Any]]] = [[], [], []]
    for seed, (source, n) in enumerate(SOURCES.items()):
        values = records(seed, n)
        values[::37, 1] = np.nan
        for k, (time_ns, row) in enumerate(zip(times(n).tolist(), values.tolist(), strict=True)):
            flow, power, temp, stopped = row
            parts[3 * k // n].append(
                {
                    "time": time_ns,
                    "source": source,
                    "flow": flow,
                    "power": None if power != power else power,
                    "temp": temp,
                    "pump": "stopped" if stopped else "running",
                }
            )
    schema = pa.schema(
        [("time", pa.timestamp("ns", tz="UTC")), ("source", pa.string())]
        + [(name, pa.float64()) for name in ("flow", "power", "temp")]
        + [("pump", pa.string())]
    )
    for name, part in zip("bac", parts, strict=True):
        pq.write_table(pa.Table.from_pylist(part, schema), folder / "data" / f"{name}.parquet")
    return History(folder / "data", folder / "channels.toml")


@pytest.fixture(scope="module")
def alone(history: History, tmp_path_factory: pytest.TempPathFactory) -> str:
    """Return the name of the model that this process learns by itself."""
    with spool_history([history.folder], history.table, HistoryOptions()) as spool:
        result = learn_model(spool, history.table, LearnSettings())
    assert sorted(result.model.members) == ["east", "mill", "north", "south"]
    return write_model(result.model, tmp_path_factory.mktemp("alone") / "model").name


@pytest.fixture(scope="module")
def address(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """Run a scheduler without workers."""
    with scheduler(tmp_path_factory.mktemp("scheduler")) as found:
        yield found


@contextmanager
def two_workers(folder: Path, address: str) -> Iterator[dict[str, subprocess.Popen[bytes]]]:
    """Run two worker processes, and give them by name."""
    with ExitStack() as stack:
        yield {
            name: stack.enter_context(worker(folder, address, name)) for name in ("first", "second")
        }


class KillHalfWay:
    """Progress that ends one of the workers, hard, once half of the members are there."""

    def __init__(self, client: Any, workers: dict[str, subprocess.Popen[bytes]]) -> None:
        self._client, self._workers = client, workers
        self.n_done = 0
        self.lost: list[str] = []

    def advance(self, n: int) -> None:
        """Count, and end a worker that has work in hand."""
        self.n_done += n
        if self.n_done == 2:
            self.lost.append(end_a_busy_one(self._client, self._workers))


def end_a_busy_one(client: Any, workers: dict[str, subprocess.Popen[bytes]]) -> str:
    """End a worker that has work in hand, hard, and return its name."""
    until = time.monotonic() + 30
    while not (busy := [at for at, tasks in client.processing().items() if tasks]):
        assert time.monotonic() < until, "nobody has work in hand"
        time.sleep(0.01)
    names = {worker["id"]: at for at, worker in client.scheduler_info()["workers"].items()}
    (name,) = (name for name in workers if names.get(name) == busy[0])
    workers[name].kill()
    workers[name].wait()
    return name


def learn(out: Path, history: History, *words: str | Path) -> Result:
    """Run the command on a history; what it refuses is raised."""
    line = [history.folder.name, "--channels", history.channels, "--out", out, *words]
    result = CliRunner().invoke(learn_command, [str(word) for word in line], standalone_mode=False)
    if isinstance(result.exception, NoCluster):
        raise result.exception
    assert result.exit_code == 0, result.exception
    return result


def noting(monkeypatch: pytest.MonkeyPatch) -> set[str]:
    """Return the names of the work that is handed out from now on."""
    handed_out: set[str] = set()
    submit = Cluster._submit

    def noted(self: Cluster, work: Any, item: Any) -> Any:
        handed_out.add(getattr(work, "func", work).__name__)
        return submit(self, work, item)

    monkeypatch.setattr(Cluster, "_submit", noted)
    return handed_out


def test_two_workers_learn_the_same_model_though_one_is_killed_half_way_and_so_does_one(
    history: History,
    alone: str,
    address: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    with two_workers(tmp_path, address) as workers:
        with (
            cluster_at(address) as hands,
            spool_history([history.folder], history.table, HistoryOptions()) as spool,
        ):
            assert isinstance(hands, Cluster)
            hands.client.wait_for_workers(2, timeout=60)
            hands.part_records = PART_RECORDS
            kill = KillHalfWay(hands.client, workers)
            result = learn_model(spool, history.table, LearnSettings(), kill, hands=hands)
            assert len(kill.lost) == 1
            assert len(hands.client.nthreads()) == 1
        assert write_model(result.model, tmp_path / "model").name == alone
        # Now the command, which has the files read as well, by the one that is left.
        # A history is named from the folder one works in, and workers work in another.
        monkeypatch.chdir(history.folder.parent)
        handed_out = noting(monkeypatch)
        said = learn(tmp_path / "again", history, "--cluster", address).output
    n = sum(SOURCES.values())
    assert said.startswith(f"{n} rows read, {n} records kept of {len(SOURCES)} sources")
    assert read_model(tmp_path / "again").name == alone
    reading, learning = {"_read", "_join"}, {"_learn_part", "_shared_or_own"}
    levels = {"_keep", "_rest_of", "_episodes_of", "_peaks_of", "_raised_of"}
    whole = {"_sampled_of", "_count", "_parts_of", "_still_of", "_seen_nats"}
    assert handed_out == reading | learning | levels | whole


def night(*words: str) -> dict[str, Any]:
    """Run the nightly command and return its report's data; what goes wrong is raised."""
    line = ["--config", "nightly.toml", *words]
    result = CliRunner().invoke(nightly_command, line, standalone_mode=False)
    assert result.exception is None, result.exception
    return last_night()


def test_a_night_on_two_workers_publishes_the_same_model_though_one_is_killed_over_the_levels(
    address: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    write_site(tmp_path)
    with running(tmp_path) as api:
        for number, source in enumerate(NIGHT_SOURCES):
            assert api.post(some_records(source, number)).status_code == 200
    first, alone = night(), night()
    lost: list[str] = []
    submit, handed_out = Cluster._submit, noting(monkeypatch)
    noted = Cluster._submit
    with two_workers(tmp_path, address) as workers:

        def submitted(self: Cluster, work: Any, item: Any) -> Any:
            if lost or work.func.__name__ != "_episodes_of":
                return noted(self, work, item)
            handed_out.add(work.func.__name__)
            future = submit(self, partial(slowly, work=work), item)
            lost.append(end_a_busy_one(self.client, workers))
            return future

        @contextmanager
        def in_small_parts(where: str | None) -> Iterator[Hands]:
            with cluster_at(where) as hands:
                assert isinstance(hands, Cluster)
                hands.client.wait_for_workers(2, timeout=60)
                hands.part_records = N_RECORDS // 2
                yield hands

        monkeypatch.setattr(Cluster, "_submit", submitted)
        monkeypatch.setattr("training.nightly.cluster_at", in_small_parts)
        shared = night("--cluster", address)
    assert len(lost) == 1
    assert shared["verdict"] == alone["verdict"] == "published"
    name = read_model(Path("models/current")).name
    assert shared["model"] == alone["model"] == first["model"] == name
    # The judge, too, finds the same to the last digit.
    assert shared["answers"] == alone["answers"]
    assert len(shared["answers"]) == 13
    levels = {"_keep", "_rest_of", "_episodes_of", "_peaks_of", "_raised_of"}
    assert {"_learn_part", "_count", "tell", *levels} <= handed_out


def test_a_night_does_not_wait_for_workers_that_are_all_gone(
    address: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(cluster_module, "PATIENCE_S", 5)
    with worker(tmp_path, address, "only") as process, cluster_at(address) as hands:
        results = hands.each(time.sleep, [0.0, 600.0])
        assert next(results) is None
        process.kill()
        monkeypatch.setattr(cluster_module, "PATIENCE_S", 1)
        with pytest.raises(NoCluster, match="no worker is left; start some and run this again"):
            next(results)


def test_a_folder_that_workers_do_not_see_and_other_code_are_refused(
    address: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    with worker(tmp_path, address, "only"), cluster_at(address) as hands:
        hands.must_see(tmp_path)
        with pytest.raises(NoCluster, match="cannot write to .*nowhere; set TMPDIR here to a fol"):
            hands.must_see(tmp_path / "nowhere")
        here = cluster_module.running()
        monkeypatch.setattr(cluster_module, "running", lambda: here | {"numpy": "1.0"})
        with pytest.raises(NoCluster, match=r"runs numpy [\d.]+, here 1.0; the model would dep"):
            hands.must_see(tmp_path)


def test_sources_are_counted_in_parts_of_neighbours() -> None:
    hands = Cluster("tcp://none", None, RuntimeError, part_records=100)
    assert hands.groups([60, 60, 10, 200, 5, 5]) == [[0, 1], [2, 3], [4, 5]]
    assert hands.groups([100, 100]) == [[0], [1]]


def test_without_an_address_this_process_does_the_work() -> None:
    with cluster_at(None) as hands:
        assert hands is HERE


def test_a_missing_library_is_a_sentence(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    with (
        pytest.raises(NoCluster, match=r"needs Dask, .*pip install 'oddbranch\[cluster\]'"),
        cluster_at("tcp://127.0.0.1:1"),
    ):
        pass


def test_nobody_at_the_address_is_a_sentence(monkeypatch: pytest.MonkeyPatch) -> None:
    need_dask()
    monkeypatch.setattr(cluster_module, "PATIENCE_S", 1)
    with (
        pytest.raises(NoCluster, match="no scheduler answers there"),
        cluster_at("tcp://127.0.0.1:1"),
    ):
        pass
    with pytest.raises(NoCluster, match="no scheduler answers there"), cluster_at("nonsense://x"):
        pass


def test_a_scheduler_without_workers_is_a_sentence(
    address: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(cluster_module, "PATIENCE_S", 1)
    with pytest.raises(NoCluster, match="has no worker; start some with"), cluster_at(address):
        pass
