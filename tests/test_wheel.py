"""The wheel: what is in it, and that it runs where nothing else of ours is."""

from __future__ import annotations

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

from tests.conftest import ROOT

TOP_LEVEL = {"config", "oddbranch.py", "scoring", "service", "training"}


def run(*words: str | Path, **more: object) -> str:
    """Run a program to its end and return what it wrote; its failure is the test's."""
    done = subprocess.run(
        [str(word) for word in words], capture_output=True, text=True, check=False, **more
    )  # type: ignore[call-overload]  # subprocess.run's overloads take no forwarded options
    assert done.returncode == 0, f"{words[0]} ended with {done.returncode}:\n{done.stderr}"
    return str(done.stdout)


@pytest.fixture(scope="module")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Build the wheel from the tree with the build backend that is installed."""
    folder = tmp_path_factory.mktemp("wheel")
    build = "import sys, hatchling.build as b; print(b.build_wheel(sys.argv[1]))"
    run(sys.executable, "-c", build, folder, cwd=ROOT)
    (path,) = folder.glob("oddbranch-*.whl")
    return path


def test_the_wheel_holds_the_rooms_and_nothing_else(wheel: Path) -> None:
    with zipfile.ZipFile(wheel) as archive:
        tops = {name.split("/")[0] for name in archive.namelist()}
    assert {top for top in tops if not top.endswith(".dist-info")} == TOP_LEVEL


def test_every_shipped_configuration_file_is_in_the_wheel(wheel: Path) -> None:
    with zipfile.ZipFile(wheel) as archive:
        names = set(archive.namelist())
    wanted = {f"config/{path.name}" for path in (ROOT / "config").glob("*.toml")}
    assert wanted <= names
    assert "config/__init__.py" in names


def test_the_wheel_holds_no_caches(wheel: Path) -> None:
    with zipfile.ZipFile(wheel) as archive:
        names = archive.namelist()
    assert not [n for n in names if "__pycache__" in n or n.endswith((".pyc", ".nbi", ".nbc"))]


@pytest.mark.soak
def test_the_wheel_installs_into_an_empty_environment_and_runs(wheel: Path, tmp_path: Path) -> None:
    run(sys.executable, "-m", "venv", tmp_path / "venv")
    folder = tmp_path / "venv" / "bin"
    run(folder / "python", "-m", "pip", "install", "--quiet", wheel)
    bare = {"PATH": os.environ["PATH"], "HOME": str(tmp_path)}
    assert "survey" in run(folder / "oddbranch", "--help", cwd=tmp_path, env=bare)
    assert run(folder / "oddbranch", "demo", "--once", cwd=tmp_path, env=bare)
