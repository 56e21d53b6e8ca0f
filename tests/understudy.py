"""Stands in for `systemctl` where no systemd runs: starts what a unit says, as its user.

Called as `understudy.py FOLDER systemctl-words`; FOLDER keeps process ids, what was said,
and in `not-done` which keys of a unit and which commands only systemd can see to.
"""

from __future__ import annotations

import os
import pwd
import shlex
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

PLACES = (Path("/etc/systemd/system"), Path("/lib/systemd/system"))
# What is done here; every other key of [Service] is noted as not done.
DONE = {
    *("Type", "User", "Group", "WorkingDirectory", "Environment", "EnvironmentFile", "ExecStart"),
    *("StateDirectory", "CacheDirectory", "StateDirectoryMode", "ExecReload", "PIDFile", "UMask"),
    *("ExecStartPre", "ExecStop", "TimeoutStopSec", "KillMode"),
    "SuccessExitStatus",
}
Keys = dict[str, list[str]]


class Unit:
    """A unit's [Service] section with its drop-ins; a key may come several times."""

    def __init__(self, name: str) -> None:
        self.name = name
        found = [place / f"{name}.service" for place in PLACES]
        path = next((path for path in found if path.exists()), None)
        if path is None:
            sys.exit(f"Failed to find {name}.service")
        self.keys: Keys = {}
        for part in (path, *sorted(path.with_suffix(".service.d").glob("*.conf"))):
            for key, value in _service(part.read_text(encoding="utf-8")):
                self.keys.setdefault(key, []).append(value)

    def get(self, key: str, default: str = "") -> str:
        """Return the last value of a key."""
        return self.keys.get(key, [default])[-1]

    def environment(self) -> dict[str, str]:
        """Return what the unit gives its process."""
        found = {"PATH": "/usr/local/sbin:/usr/local/bin:/usr/sbin:/usr/bin:/sbin:/bin"}
        for line in self.keys.get("Environment", []):
            for word in shlex.split(line):
                key, _, value = word.partition("=")
                found[key] = value
        for name in self.keys.get("EnvironmentFile", []):
            path = Path(name.removeprefix("-"))
            if path.exists():
                for line in path.read_text(encoding="utf-8").splitlines():
                    if "=" in line and not line.startswith("#"):
                        key, _, value = line.partition("=")
                        found[key] = value.strip("\"'")
        return found

    def command(self, key: str) -> list[str]:
        """Return a command with its variables put in."""
        words = []
        variables = self.environment()
        for word in shlex.split(self.get(key).lstrip("-@:+!")):
            if word.startswith("$"):
                words += shlex.split(variables.get(word.strip("${}"), ""))
            else:
                words.append(word)
        return words


def _service(text: str) -> Iterator[tuple[str, str]]:
    section = ""
    for line in text.splitlines():
        if line.startswith("["):
            section = line
        elif section == "[Service]" and "=" in line and not line.startswith(("#", ";")):
            key, _, value = line.partition("=")
            yield key.strip(), value.strip()


class Understudy:
    """The commands of systemctl that deploy/README.md uses."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def note(self, text: str) -> None:
        """Write down what only systemd can do."""
        with (self.folder / "not-done").open("a", encoding="utf-8") as file:
            file.write(text + "\n")

    def pid(self, unit: Unit) -> int | None:
        """Return the running process of a unit."""
        own = self.folder / f"{unit.name}.pid"
        path = Path(unit.get("PIDFile", str(own)))
        try:
            pid = int(path.read_text(encoding="ascii"))
            state = Path(f"/proc/{pid}/stat").read_text(encoding="ascii").rpartition(")")[2]
        except (OSError, ValueError):
            return None
        return None if state.split()[0] == "Z" else pid

    def start(self, unit: Unit) -> None:
        """Make its folders and start it as its user."""
        if self.pid(unit) is not None:
            return
        not_done = sorted(set(unit.keys) - DONE)
        self.note(f"{unit.name}: {', '.join(not_done)}")
        user = unit.get("User", "root")
        entry = pwd.getpwnam(user)
        for key, parent in (("StateDirectory", "/var/lib"), ("CacheDirectory", "/var/cache")):
            if unit.get(key):
                path = Path(parent) / unit.get(key)
                path.mkdir(parents=True, exist_ok=True)
                shutil.chown(path, user, user)
        command, environment = unit.command("ExecStart"), unit.environment()
        where = unit.get("WorkingDirectory", "/")
        if unit.get("Type") == "forking":
            subprocess.run(command, env=environment, cwd=where, check=True)
            return
        with (self.folder / f"{unit.name}.log").open("ab") as log:
            process = subprocess.Popen(
                command, env=environment | {"HOME": entry.pw_dir}, cwd=where, stdout=log,
                stderr=log, stdin=subprocess.DEVNULL, start_new_session=True, user=entry.pw_uid,
                group=entry.pw_gid, extra_groups=[], umask=int(unit.get("UMask", "0022"), 8),
            )  # fmt: skip
        (self.folder / f"{unit.name}.pid").write_text(str(process.pid), encoding="ascii")
        if unit.get("Type") == "oneshot":
            code = process.wait()
            sys.exit(0 if str(code) in unit.get("SuccessExitStatus").split() else code)

    def stop(self, unit: Unit) -> None:
        """End it and wait."""
        pid = self.pid(unit)
        if pid is None:
            return
        os.kill(pid, signal.SIGTERM)
        end = time.monotonic() + 30
        while self.pid(unit) == pid:
            if time.monotonic() > end:
                sys.exit(f"{unit.name} does not end")
            time.sleep(0.02)

    def reload_or_restart(self, unit: Unit) -> None:
        """Reload it where it runs, else start it."""
        if self.pid(unit) is not None and unit.get("ExecReload"):
            subprocess.run(unit.command("ExecReload"), check=True)
        else:
            self.start(unit)

    def run(self, words: list[str]) -> None:
        """Do one command."""
        what, names = words[0], [word for word in words[1:] if not word.startswith("-")]
        if what in ("daemon-reload", "list-timers") or any(n.endswith(".timer") for n in names):
            self.note(f"systemctl {' '.join(words)}")
            return
        for name in names:
            unit = Unit(name.removesuffix(".service"))
            if what == "enable":
                self.note(f"systemctl enable {name}: at the next boot")
            if what in ("stop", "restart"):
                self.stop(unit)
            if what in ("start", "restart") or (what == "enable" and "--now" in words):
                self.start(unit)
            if what == "reload-or-restart":
                self.reload_or_restart(unit)


if __name__ == "__main__":
    Understudy(Path(sys.argv[1])).run(sys.argv[2:])
