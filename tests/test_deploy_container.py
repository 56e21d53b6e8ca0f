"""The container file, its compose file, and the script whose steps they share.

No image can be built where the tests run, so the files are linted and the steps are taken
in a fresh environment, from just the files that a build would see.
"""

from __future__ import annotations

import fnmatch
import json
import os
import re
import shutil
import site
import subprocess
import sys
import tempfile
import time
import tomllib
from importlib.metadata import PackageNotFoundError, requires, version
from pathlib import Path
from typing import Any

import pytest
import yaml
from packaging.requirements import Requirement

from config import known
from tests.conftest import ROOT, machine_python, need_program
from tests.test_deploy_systemd import read as read_unit

FOLDER = ROOT / "deploy" / "container"
LINES = [
    line
    for line in (FOLDER / "Containerfile").read_text(encoding="utf-8").splitlines()
    if not line.startswith("#")
]
COMPOSE: dict[str, Any] = yaml.safe_load((FOLDER / "compose.yml").read_text(encoding="utf-8"))
# What the person who follows deploy/README.md puts beside the compose file.
BEFOREHAND = {
    *("postgres_password", "store_url", "certificate.pem", "key.pem", "oddbranch.token"),
    *("nginx.conf", "prometheus.yml", "channels.toml"),
}
# From the compose specification (from memory), as far as these files use it.
SERVICE_KEYS = {
    *("build", "image", "restart", "read_only", "cap_drop", "security_opt", "tmpfs", "env_file"),
    *("environment", "volumes", "depends_on", "secrets", "healthcheck", "ports", "command"),
    *("profiles",),
}
FIRST_PORT = 8321


def instructions() -> list[tuple[str, str]]:
    """Return (instruction, words) with continued lines joined."""
    text = re.sub(r"\\\n\s*", "", "\n".join(LINES))
    return [tuple(line.split(" ", 1)) for line in text.splitlines() if line]  # type: ignore[misc]


def context(folder: Path) -> Path:
    """Copy what a build would see, by the ignore file, and return the folder."""
    lines = (FOLDER / "Containerfile.dockerignore").read_text(encoding="utf-8").splitlines()
    kept = [line[1:] for line in lines if line.startswith("!")]
    out = folder / "source"
    for name in kept:
        source, target = ROOT / name, out / name
        target.parent.mkdir(parents=True, exist_ok=True)
        if source.is_dir():
            shutil.copytree(source, target, ignore=shutil.ignore_patterns("__pycache__"))
        else:
            shutil.copy2(source, target)
    return out


def build(source: Path, prefix: Path, kernels: str, **environment: str) -> str:
    """Take the steps of deploy/build.sh and return what it said."""
    bare = {"PATH": os.environ["PATH"], "HOME": str(prefix.parent), "PYTHON": sys.executable}
    # Where this machine has its packages from.
    bare |= {key: value for key, value in os.environ.items() if key.startswith("PIP_")}
    done = subprocess.run(
        [str(source / "deploy" / "build.sh"), str(prefix), kernels],
        capture_output=True,
        text=True,
        check=False,
        cwd=prefix.parent,
        env=bare | environment,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return done.stdout


@pytest.fixture(scope="module")
def built(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a fresh environment, built without the registry: libraries are this one's."""
    folder = tmp_path_factory.mktemp("built")
    packages = site.getsitepackages()[0]
    said = build(
        context(folder), folder / "opt", "none",
        PIP_NO_DEPS="1", PIP_NO_BUILD_ISOLATION="0", PIP_NO_INDEX="1", PYTHONPATH=packages,
    )  # fmt: skip
    assert said.startswith("oddbranch ")
    return folder / "opt"


def test_the_linter_finds_nothing_to_say() -> None:
    beside = Path(sys.executable).parent / "hadolint"
    linter = str(beside) if beside.exists() else need_program("hadolint")
    done = subprocess.run(
        [linter, FOLDER / "Containerfile"], capture_output=True, text=True, check=False
    )
    assert (done.returncode, done.stdout) == (0, "")


def test_what_runs_has_nothing_that_builds_and_is_nobody_else() -> None:
    steps = instructions()
    stages = [index for index, (name, _) in enumerate(steps) if name == "FROM"]
    assert len(stages) == 2
    last = steps[stages[1] :]
    assert not [words for name, words in last if "build.sh" in words or "pip" in words]
    users = [words for name, words in last if name == "USER"]
    assert users == ["8321"]
    assert any("--uid 8321" in words for name, words in last if name == "RUN")
    for name, words in steps:
        if name == "FROM":
            assert re.fullmatch(r"python:3\.\d+-slim-\w+( AS build)?", words)
        assert name != "ADD"
    # In exec form a signal reaches the service, which then stores what waits.
    for name in ("ENTRYPOINT", "CMD"):
        (words,) = [words for found, words in last if found == name]
        assert isinstance(json.loads(words), list)


def test_the_image_is_built_by_the_script_that_a_bare_machine_runs() -> None:
    runs = [words for name, words in instructions() if name == "RUN"]
    assert "deploy/build.sh /opt/oddbranch all" in runs
    program = read_unit(ROOT / "deploy/systemd/oddbranch.service")["Service"]["ExecStart"].split()
    assert program[0] == "/opt/oddbranch/bin/oddbranch"
    assert " ".join(program[1:]) == " ".join(json.loads(dict(instructions())["CMD"]))


def test_every_file_that_is_copied_is_there() -> None:
    for name, words in instructions():
        if name == "COPY" and "--from" not in words and not words.startswith(". "):
            assert (ROOT / words.split()[0]).is_file()


def test_a_fresh_environment_runs_from_what_the_build_sees(built: Path, tmp_path: Path) -> None:
    bare = {"PATH": "/usr/bin:/bin", "HOME": str(tmp_path), "PYTHONPATH": site.getsitepackages()[0]}
    # The start of the container: kernels are taken along once, and the command takes over.
    (built / "kernels").mkdir(exist_ok=True)
    (built / "kernels" / "some.nbi").write_bytes(b"x")
    bare |= {"INSTALLED": str(built), "NUMBA_CACHE_DIR": str(tmp_path / "kernels")}
    done = subprocess.run(
        [str(FOLDER / "start.sh"), "settings", "nightly"],
        capture_output=True, text=True, check=False, cwd=tmp_path, env=bare,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert "models.keep = 14" in done.stdout
    assert (tmp_path / "kernels" / "some.nbi").read_bytes() == b"x"
    # It runs what was installed, not this tree.
    where = subprocess.run(
        [built / "bin" / "python", "-c", "import service; print(service.__file__)"],
        capture_output=True, text=True, check=True, cwd=tmp_path, env=bare,
    )  # fmt: skip
    assert where.stdout.startswith(str(built))


@pytest.mark.parametrize("words", [[], ["x", "some"]])
def test_the_script_says_how_it_is_used(words: list[str], tmp_path: Path) -> None:
    done = subprocess.run(
        [ROOT / "deploy" / "build.sh", *words], capture_output=True, text=True, check=False,
        cwd=tmp_path,
    )  # fmt: skip
    assert done.returncode == 2
    assert "say serve, all or none" in done.stderr or "usage: deploy/build.sh" in done.stderr
    assert not list(tmp_path.iterdir())


def closure(name: str, extras: tuple[str, ...]) -> set[str]:
    """Return everything that a distribution needs here, by name."""
    found: set[str] = set()
    left = [(name, extras)]
    seen = set()
    while left:
        at = left.pop()
        if at in seen:
            continue
        seen.add(at)
        for text in requires(at[0]) or []:
            wanted = Requirement(text)
            asked = [{"extra": extra} for extra in (*at[1], "")]
            if wanted.marker is None or any(wanted.marker.evaluate(one) for one in asked):
                try:
                    version(wanted.name)
                except PackageNotFoundError:
                    continue
                found.add(wanted.name.lower().replace("_", "-"))
                left.append((wanted.name, tuple(sorted(wanted.extras))))
    return found


def test_a_deployment_installs_fixed_versions_of_everything() -> None:
    lines = (ROOT / "deploy" / "constraints.txt").read_text(encoding="utf-8").splitlines()
    fixed = dict(line.split("==") for line in lines if not line.startswith("#"))
    assert closure("oddbranch", ("postgresql",)) <= set(fixed)
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    for text in (*project["dependencies"], *project["optional-dependencies"]["postgresql"]):
        wanted = Requirement(text)
        assert wanted.specifier.contains(fixed[wanted.name]), text


@pytest.mark.parametrize("name", COMPOSE["services"])
def test_a_compose_service_is_whole(name: str) -> None:
    service = COMPOSE["services"][name]
    assert set(service) <= SERVICE_KEYS
    assert re.search(r":v?\d", service["image"]), "a version, so that a restart changes nothing"
    depends = service.get("depends_on", [])
    assert set(depends) <= set(COMPOSE["services"])
    assert set(service.get("secrets", [])) <= set(COMPOSE["secrets"])
    for volume in service.get("volumes", []):
        source, target = volume.split(":")[:2]
        assert target.startswith("/")
        if source.startswith("."):
            path = (FOLDER / source).resolve()
            assert path.is_file() or source.removeprefix("./") in BEFOREHAND, source
            assert volume.endswith(":ro")
        else:
            assert source in COMPOSE["volumes"]


def test_our_own_containers_can_do_nothing_but_their_work() -> None:
    own = [one for one in COMPOSE["services"].values() if one["image"].startswith("oddbranch:")]
    assert len(own) >= 2
    for service in own:
        assert service["read_only"] is True
        assert service["cap_drop"] == ["ALL"]
        assert service["security_opt"] == ["no-new-privileges:true"]
        assert (FOLDER / service["build"]["context"] / service["build"]["dockerfile"]).is_file()
        assert known.misspelt(service["environment"]) is None
        if "profiles" not in service:
            hosts = json.loads(service["environment"]["ODDBRANCH_SERVER__HOSTS"])
            assert {"pumps.example", "replica-1", "replica-2"} <= set(hosts)
        assert "ports" not in service, "reached through the proxy alone"


def test_every_secret_and_every_file_beforehand_is_kept_out_of_the_image() -> None:
    lines = (FOLDER / "Containerfile.dockerignore").read_text(encoding="utf-8").splitlines()
    assert "*" in lines
    for name in BEFOREHAND:
        assert any(
            fnmatch.fnmatch(f"deploy/container/{name}", one) for one in lines if one[0] != "!"
        )
    ignored = (ROOT / ".gitignore").read_text(encoding="utf-8").split()
    for name in ("postgres_password", "store_url", "key.pem", "oddbranch.token"):
        assert f"/deploy/container/{name}" in ignored


@pytest.mark.soak
def test_the_whole_build_starts_quickly_as_another_user_who_cannot_write() -> None:
    """Libraries come from the registry; the kernels are compiled into the environment."""
    # Not the tests' own folder, which another user may not enter.
    with tempfile.TemporaryDirectory(prefix="oddbranch-built-") as name:
        Path(name).chmod(0o755)
        _build_and_start(Path(name))


def _build_and_start(folder: Path) -> None:
    source = context(folder)
    python = machine_python()
    build(source, folder / "opt", "serve", NUMBA_CPU_NAME="generic", PYTHON=python)
    home = folder / "home"
    home.mkdir()
    home.chmod(0o777)
    environment = {
        "PATH": "/usr/bin:/bin", "HOME": str(home), "INSTALLED": str(folder / "opt"),
        "NUMBA_CACHE_DIR": str(home / "kernels"), "NUMBA_CPU_NAME": "generic",
    }  # fmt: skip
    model = source / "tests" / "data" / "formats" / "model-1"
    began = time.perf_counter()
    with subprocess.Popen(
        [FOLDER / "start.sh", "serve", "--model", model, "--data", "data", "--port", "0"],
        cwd=home, env=environment, stdout=subprocess.PIPE, text=True,
        user="nobody" if os.geteuid() == 0 else None,
    ) as process:  # fmt: skip
        assert process.stdout is not None
        said = process.stdout.readline()
        took_s = time.perf_counter() - began
        process.terminate()
    assert "Serving on" in said
    sys.stdout.write(f"built, started as another user in {took_s:.1f} s\n")
    compiled = sum(1 for _ in (folder / "opt" / "kernels").rglob("*.nbc"))
    assert sum(1 for _ in (home / "kernels").rglob("*.nbc")) == compiled > 10
