"""The units that ship are units that systemd takes, and are hardened alike."""

from __future__ import annotations

import configparser
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from oddbranch import COMMANDS
from service.settings import Settings
from tests.conftest import ROOT, need_program

FOLDER = ROOT / "deploy" / "systemd"
UNITS = sorted(path for path in FOLDER.iterdir() if path.suffix in (".service", ".timer"))
SERVICES = [unit for unit in UNITS if unit.suffix == ".service"]
PROGRAM = "/opt/oddbranch/bin/oddbranch"
# What systemd finds left open, 0 to 10. Open on purpose: memory that is written and run
# (compiled kernels), /proc, the host's root; for the service its network.
MOST_EXPOSED = {"oddbranch.service": 1.0, "oddbranch-nightly.service": 0.4}


def read(unit: Path) -> configparser.ConfigParser:
    """Return a unit's sections."""
    # A key may come again, which systemd adds up; what is asked for here comes once.
    parser = configparser.ConfigParser(interpolation=None, strict=False)
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
    calendar = read(FOLDER / "oddbranch-nightly.timer")["Timer"]["OnCalendar"]
    done = subprocess.run(
        [need_program("systemd-analyze"), "calendar", calendar],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert "Next elapse" in done.stdout


def test_a_missed_night_is_caught_up_and_machines_do_not_start_together() -> None:
    timer = read(FOLDER / "oddbranch-nightly.timer")["Timer"]
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
        "PrivateUsers": "yes",
        "RestrictNamespaces": "yes",
        "IPAddressDeny": "any",
        "StateDirectoryMode": "0750",
    }
    assert {key: service[key] for key in wanted} == wanted
    # Compiled kernels need a place to be kept where the program's own folder is read-only.
    assert service["Environment"] == "NUMBA_CACHE_DIR=/var/cache/oddbranch"
    assert service["CacheDirectory"] == "oddbranch"


@pytest.mark.parametrize("unit", SERVICES, ids=lambda unit: unit.name)
def test_systemd_finds_little_left_open(unit: Path) -> None:
    most = MOST_EXPOSED[unit.name]
    words = ["security", "--offline=true", "--no-pager", f"--threshold={round(most * 10)}", unit]
    done = subprocess.run(
        [need_program("systemd-analyze"), *map(str, words)],
        capture_output=True,
        text=True,
        check=False,
    )
    found = re.search(r"Overall exposure level for \S+: ([\d.]+)", done.stdout)
    assert found, done.stderr
    assert float(found[1]) <= most, done.stdout
    assert done.returncode == 0


def test_a_unit_that_gives_nothing_away_is_found(tmp_path: Path) -> None:
    bare = tmp_path / "bare.service"
    bare.write_text("[Service]\nExecStart=/bin/true\n", encoding="utf-8")
    words = ["security", "--offline=true", "--no-pager", "--threshold=20", str(bare)]
    done = subprocess.run(
        [need_program("systemd-analyze"), *words], capture_output=True, check=False
    )
    assert done.returncode != 0


def test_systemd_makes_the_user_and_its_folders(tmp_path: Path) -> None:
    (tmp_path / "etc").mkdir()
    users, folders = FOLDER / "oddbranch.sysusers.conf", FOLDER / "oddbranch.tmpfiles.conf"
    for program, path in (("systemd-sysusers", users), ("systemd-tmpfiles", folders)):
        words = [need_program(program), f"--root={tmp_path}", str(path)]
        if program == "systemd-tmpfiles":
            words.insert(1, "--create")
        done = subprocess.run(words, capture_output=True, text=True, check=False)
        if os.geteuid() == 0:
            assert done.returncode == 0, done.stderr
    if os.geteuid() != 0:
        return
    passwd = (tmp_path / "etc" / "passwd").read_text(encoding="utf-8")
    made = re.search(r"^oddbranch:x:(\d+):(\d+):", passwd, re.MULTILINE)
    assert made
    own = (int(made[1]), int(made[2]))
    for name, mode in (("var/lib/oddbranch", 0o750), ("var/cache/oddbranch", 0o750)):
        stat = (tmp_path / name).stat()
        assert (stat.st_uid, stat.st_gid, stat.st_mode & 0o777) == (*own, mode)
    settings = (tmp_path / "etc" / "oddbranch").stat()
    # The service reads its settings and cannot change them.
    assert (settings.st_uid, settings.st_gid, settings.st_mode & 0o777) == (0, own[1], 0o750)


def test_the_service_may_hold_as_many_connections_as_its_settings_say() -> None:
    n_files = int(read(FOLDER / "oddbranch.service")["Service"]["LimitNOFILE"])
    # The server refuses connections itself from 2 n + 16 on.
    assert n_files > 2 * Settings().server.n_connections + 100
