"""Models published while service and publisher are killed: the one in use is always whole."""

from __future__ import annotations

import random
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import httpx
import pytest

from scoring.artefact import read_model, write_model
from tests.conftest import ROOT
from tests.models import a_model
from tests.service_http import Server
from tests.test_service_durable import Sender, fetch_all
from training.kept import KeptModels


def write_some(folder: Path) -> list[Path]:
    """Write three models that differ in a level, and so in their names."""
    model = a_model()
    levels = [replace(model.levels, record=20.0 + i) for i in range(3)]
    paths = [folder / f"{i}" for i in range(len(levels))]
    for path, level in zip(paths, levels, strict=True):
        write_model(replace(model, levels=level), path)
    return paths


class Publisher:
    """Processes, one after the other, that publish without end, and what they said they had."""

    def __init__(self, folder: Path, paths: list[Path]) -> None:
        self._words = [sys.executable, "-m", "tests.model_publisher", str(folder), *map(str, paths)]
        self._said = folder.with_suffix(".said")
        self.start()

    def start(self) -> None:
        """Start one, which finds what the one before left."""
        with self._said.open("ab") as out:
            self.process = subprocess.Popen(self._words, cwd=ROOT, stdout=out)

    def said(self) -> list[str]:
        """Return the directories that were named; one that was cut off is none."""
        return self._said.read_text(encoding="ascii").split("\n")[:-1]

    @property
    def is_killed(self) -> bool:
        """Whether none publishes now."""
        return self.process.returncode is not None

    def kill(self) -> None:
        """End it as a power cut would."""
        self.process.kill()
        self.process.wait()


def wait_for(what: Callable[[], bool], words: str) -> None:
    """Return once something is so."""
    end = time.monotonic() + 30
    while not what():
        assert time.monotonic() < end, words
        time.sleep(0.01)


def wait_for_more(count: Callable[[], int], words: str) -> None:
    """Return once a count has grown."""
    before = count()
    wait_for(lambda: count() > before, words)


def model_in_use(server: Server) -> str:
    """Return the name that a service says it scores with."""
    return str(httpx.get(f"{server.url}/health/ready").json()["model"])


def wait_for_model(server: Server, name: str) -> None:
    """Return once a service scores with a model."""
    wait_for(lambda: model_in_use(server) == name, f"{name} is not taken")


def leftovers(folder: Path) -> list[Path]:
    """Return the directories that no listing shows."""
    return [path for path in folder.glob(".*") if path.is_dir()]


def catch_half_a_model(folder: Path) -> None:
    """Return at a moment at which one is being written: chance alone may never meet it."""
    end = time.monotonic() + 5
    while not leftovers(folder) and time.monotonic() < end:
        pass


def check_folder(folder: Path, last_said: str, names: set[str]) -> str:
    """Everything that is kept is whole, and what was said is in use; return the name in use."""
    models = KeptModels(folder)
    current = models.current()
    assert current is not None
    assert current.path.name >= last_said
    for kept in models.kept():
        assert read_model(kept.path).name == kept.name
        assert kept.name in names
    return current.name


def kill_while_publishing(tmp_path: Path, n_kills: int, seed: int) -> None:
    """Kill a publisher and a service that follows it, one or both, again and again."""
    chance = random.Random(seed)
    folder = tmp_path / "models"
    paths = write_some(tmp_path / "learned")
    names = {read_model(path).name for path in paths}
    (tmp_path / "model").symlink_to("models/current")
    publisher = Publisher(folder, paths)
    wait_for(lambda: bool(publisher.said()), "nothing is published")
    sender = Sender("a", 3)
    thread = threading.Thread(target=sender.run)
    server = Server(tmp_path, "model.reload_s=0.1")
    sender.url = server.url
    thread.start()
    n_left = 0
    try:
        for turn in range(n_kills):
            wait_for_more(lambda: len(publisher.said()), "nothing more is published")
            wait_for_more(lambda: sender.next, "nothing more is scored")
            time.sleep(chance.uniform(0.0, 0.3))
            victims = [publisher.kill, server.kill]
            chance.shuffle(victims)
            for kill in victims[: 1 + turn % 2]:
                if kill == publisher.kill and not n_left:
                    catch_half_a_model(folder)
                kill()
                time.sleep(chance.uniform(0.0, 0.02))
            if publisher.is_killed:
                n_left += len(leftovers(folder))
                name = check_folder(folder, publisher.said()[-1], names)
                if server.is_alive:
                    wait_for_model(server, name)
                else:
                    # What lies there half written is not taken.
                    server = Server(tmp_path, "model.reload_s=0.1")
                    assert model_in_use(server) == name
                publisher.start()
            else:
                server = Server(tmp_path, "model.reload_s=0.1")
                assert model_in_use(server) in names
            sender.url = server.url
    finally:
        sender.stopping = True
        publisher.kill()
        thread.join()
        if server.is_alive:
            stored = fetch_all(server.url, "a")
            server.stop()
    check_folder(folder, publisher.said()[-1], names)
    assert n_left > 0, "no kill met a model half written"
    with KeptModels(folder).lock():
        assert leftovers(folder) == []
    # Which model scored a record was stored with it before it was acknowledged.
    said = [(a["time"], a["model"], a["surprise"]) for a in sender.acknowledged]
    assert [(a["time"], a["model"], a["surprise"]) for a in stored[: len(said)]] == said
    assert {model for _, model, _ in said} == names
    log = server.log_text()
    assert '"model_refused"' not in log
    assert '"fault"' not in log


def test_kills_while_models_are_published_leave_no_half_model(tmp_path: Path) -> None:
    kill_while_publishing(tmp_path, 10, seed=10)


@pytest.mark.soak
def test_two_hundred_kills_while_models_are_published_leave_no_half_model(tmp_path: Path) -> None:
    kill_while_publishing(tmp_path, 200, seed=200)
