"""The units that ship are units that systemd takes, and are hardened alike."""

from __future__ import annotations

import configparser
import subprocess
import sys
from pathlib import Path

import pytest

from oddbranch import COMMANDS
from tests.conftest import ROOT, need_program

UNITS = sorted((ROOT / "deploy" / "systemd").iterdir())
SERVICES = [unit for unit in UNITS if unit.suffix == ".service"]
PROGRAM = "/opt/oddbranch/bin/oddbranch"


def read(unit: Path) -> configparser.ConfigParser:
    """Return a unit's sections."""
    parser = configparser.ConfigParser(interpolation=None)
    parser.optionxform = str  # type: ignore[assignment,method-assign]  # keep capitals
    parser.read(unit, encoding="utf-8")
    return parser


def test_systemd_takes_every_unit(tmp_path: Path) -> None:
    verify = need_program("systemd-analyze")
    for unit in UNITS:
        # The program is looked for where it is, not where a site has it.
        text = unit.read_text(encoding="utf-8").replace(PROGRAM, sys.executable)
        (tmp_path / unit.name).write_text(text, encoding="utf-8")
    done = subprocess.run(
        [verify, "verify", *(str(tmp_path / unit.name) for unit in UNITS)],
        capture_output=True,
        text=True,
        check=False,
    )
    own = [line for line in done.stderr.splitlines() if "oddbranch" in line]
    assert (done.returncode, own) == (0, []), done.stderr


def test_systemd_reads_when_the_nightly_job_runs() -> None:
    calendar = read(ROOT / "deploy/systemd/oddbranch-nightly.timer")["Timer"]["OnCalendar"]
    done = subprocess.run(
        [need_program("systemd-analyze"), "calendar", calendar],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert "Next elapse" in done.stdout


def test_a_missed_night_is_caught_up_and_machines_do_not_start_together() -> None:
    timer = read(ROOT / "deploy/systemd/oddbranch-nightly.timer")["Timer"]
    assert timer["Persistent"] == "true"
    assert timer["RandomizedDelaySec"] == "30min"


@pytest.mark.parametrize("unit", SERVICES, ids=lambda unit: unit.name)
def test_a_unit_runs_a_command_there_is_as_a_user_of_its_own(unit: Path) -> None:
    service = read(unit)["Service"]
    program, command, option, settings = service["ExecStart"].split()
    assert (program, option) == (PROGRAM, "--config")
    assert command in COMMANDS
    assert (ROOT / "config" / Path(settings).name).is_file()
    assert service["User"] == "oddbranch"


@pytest.mark.parametrize("unit", SERVICES, ids=lambda unit: unit.name)
def test_a_unit_gives_away_every_right_it_does_not_need(unit: Path) -> None:
    service = read(unit)["Service"]
    wanted = {
        "NoNewPrivileges": "yes",
        "CapabilityBoundingSet": "",
        "ProtectSystem": "strict",
        "ProtectHome": "yes",
        "PrivateTmp": "yes",
        "PrivateDevices": "yes",
        "ProtectKernelTunables": "yes",
        "RestrictNamespaces": "yes",
        "SystemCallFilter": "@system-service",
        "UMask": "0077",
    }
    assert {key: service[key] for key in wanted} == wanted
    # Compiled kernels need a place to be kept where the program's own folder is read-only.
    assert service["Environment"] == "NUMBA_CACHE_DIR=/var/cache/oddbranch"
    assert service["CacheDirectory"] == "oddbranch"
