"""A bare machine to follow deploy/README.md on: `bare_machine.py FOLDER`, run by the tests.

Runs in a mount, network and process space of its own, as root. /etc, /opt, /usr/local, /var
and /run are copies that vanish with it, and nothing but loopback can be reached. FOLDER
holds `steps.json`, a list of {"name", "script", "environment"}; what came of each goes to
`done.json`. The first step that fails ends it.
"""

from __future__ import annotations

import json
import os
import subprocess
import sys
import time
from pathlib import Path

COPIED = ("/etc", "/opt", "/usr/local", "/var")
STEP_S = 240


def prepare(folder: Path) -> None:
    """Put copies over the machine's folders and raise loopback."""

    def mount(*words: str) -> None:
        subprocess.run(["mount", *words], check=True)

    scratch = folder / "scratch"
    scratch.mkdir()
    mount("-t", "tmpfs", "tmpfs", str(scratch))
    for path in COPIED:
        upper, work = scratch / f"u{path.replace('/', '-')}", scratch / f"w{path.replace('/', '-')}"
        upper.mkdir()
        work.mkdir()
        mount("-t", "overlay", "overlay", path, "-o",
              f"lowerdir={path},upperdir={upper},workdir={work}")  # fmt: skip
    mount("-t", "tmpfs", "tmpfs", "/run")
    subprocess.run(["ip", "link", "set", "lo", "up"], check=True)


def main(folder: Path) -> None:
    """Run the steps."""
    prepare(folder)
    steps = json.loads((folder / "steps.json").read_text(encoding="utf-8"))
    path = f"{folder / 'bin'}:/usr/local/sbin:/usr/local/bin:/usr/sbin:/usr/bin:/sbin:/bin"
    bare = {"PATH": path, "HOME": "/root", "LC_ALL": "C.UTF-8"}
    done = []
    for step in steps:
        began = time.monotonic()
        found = subprocess.run(
            ["sh", "-eu", "-c", step["script"]],
            env=bare | step.get("environment", {}),
            cwd=step["cwd"],
            capture_output=True,
            text=True,
            check=False,
            timeout=STEP_S,
        )
        done.append({"name": step["name"], "code": found.returncode,
                     "seconds": time.monotonic() - began, "out": found.stdout,
                     "err": found.stderr})  # fmt: skip
        (folder / "done.json").write_text(json.dumps(done), encoding="utf-8")
        if found.returncode:
            break
        # Services whose starter has ended are this process's to bury.
        while True:
            try:
                if os.waitpid(-1, os.WNOHANG)[0] == 0:
                    break
            except ChildProcessError:
                break


if __name__ == "__main__":
    main(Path(sys.argv[1]))
