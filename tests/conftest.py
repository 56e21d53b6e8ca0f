"""What the tests share: programs that must be there, and an environment without surprises."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from hypothesis import settings

# The same examples on every machine; no deadline, because a kernel's first call compiles it.
settings.register_profile("oddbranch", deadline=None, derandomize=True, database=None)
settings.load_profile("oddbranch")

ROOT = Path(__file__).resolve().parent.parent

# Where Debian keeps the programs of servers, which are not on everyone's path.
SERVER_FOLDERS = "/usr/sbin:/usr/local/sbin:/sbin"


def need_program(name: str, *others: str) -> str:
    """Return the path of an installed program, the first of the names that there is.

    A test whose program is missing is skipped, and says so. With ODDBRANCH_TEST_ALL=1,
    as on the build machine, it fails.
    """
    path = os.environ.get("PATH", "") + ":" + SERVER_FOLDERS
    # PostgreSQL's server programs are in a folder of their version.
    path += "".join(
        f":{p}" for p in sorted(Path("/usr/lib/postgresql").glob("*/bin"), reverse=True)
    )
    for wanted in (name, *others):
        found = shutil.which(wanted, path=path)
        if found:
            return found
    reason = f"program {name!r} is not installed"
    if os.environ.get("ODDBRANCH_TEST_ALL") == "1":
        pytest.fail(reason)
    pytest.skip(reason)


def machine_python() -> str:
    """Return a Python of this version that every user of the machine may run, or skip.

    One in somebody's home folder serves that user alone.
    """
    wanted = f"{sys.version_info[0]}.{sys.version_info[1]}"
    for name in (f"python{wanted}", "python3"):
        found = shutil.which(name, path="/usr/bin:/usr/local/bin")
        if found is None:
            continue
        done = subprocess.run(
            [found, "-c", "import sys, venv; print('{}.{}'.format(*sys.version_info))"],
            capture_output=True,
            text=True,
            check=False,
        )
        if done.stdout.strip() == wanted:
            return found
    pytest.skip(f"the machine has no Python {wanted} of its own, only the tests' one")


@pytest.fixture(autouse=True)
def clean_environment(monkeypatch: pytest.MonkeyPatch) -> None:
    """Keep settings of whoever runs the tests out of them; ODDBRANCH_TEST_* stays."""
    for name in list(os.environ):
        if name.startswith("ODDBRANCH_") and not name.startswith("ODDBRANCH_TEST_"):
            monkeypatch.delenv(name)
