"""Compiles the kernels into NUMBA_CACHE_DIR by using them: `python warm.py serve|all`.

`serve` starts a service over the small model that the tests hold and stops it; `all` also
learns from a made-up history. Nothing is left behind but the compiled kernels.
"""

from __future__ import annotations

import math
import os
import subprocess
import sys
import tempfile
from pathlib import Path

MODEL = Path(__file__).resolve().parent.parent / "tests" / "data" / "formats" / "model-1"
N_RECORDS = 1500
_MARK = "Serving on"


def run(*words: str, folder: Path) -> None:
    """Run one oddbranch command to its end."""
    subprocess.run([sys.executable, "-m", "oddbranch", *words], cwd=folder, check=True)  # noqa: S603 - our own program


def serve(folder: Path) -> None:
    """Start the service, which compiles what it needs before it listens, and stop it."""
    words = ["serve", "--model", str(MODEL), "--data", "data", "--port", "0"]
    with subprocess.Popen(  # noqa: S603 - our own program
        [sys.executable, "-m", "oddbranch", *words], cwd=folder, stdout=subprocess.PIPE, text=True
    ) as process:
        assert process.stdout is not None
        said = process.stdout.readline()
        process.terminate()
    if _MARK not in said:
        sys.exit("warm.py: the service did not start")


def learn(folder: Path) -> None:
    """Learn from two pumps' made-up records and score them."""
    lines = ["time,source,speed,flow,power,pump"]
    for i in range(N_RECORDS):
        for source in ("a", "b"):
            speed = 0.0 if i % 97 < 20 else 1450 + 90 * math.sin(i / 40) + i * 7 % 13
            flow, power = speed / 6 + i * 5 % 11 / 10, (speed / 1000) ** 3 * 9 + i * 3 % 7 / 20
            pump = "running" if speed else "stopped"
            day, minute = divmod(i, 1440)
            at = f"2026-01-{day + 1:02}T{minute // 60:02}:{minute % 60:02}:00Z"
            lines.append(f"{at},{source},{speed:.0f},{flow:.1f},{power:.2f},{pump}")
    (folder / "history.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    run("survey", "history.csv", "--out", "channels.toml", folder=folder)
    run("learn", "history.csv", "--channels", "channels.toml", "--out", "model", folder=folder)
    run("score", "history.csv", "--model", "model", "--out", "scores.csv", folder=folder)


def main() -> None:
    """Compile what is asked for."""
    if not os.environ.get("NUMBA_CACHE_DIR") or sys.argv[1:] not in (["serve"], ["all"]):
        sys.exit("usage: NUMBA_CACHE_DIR=FOLDER python warm.py serve|all")
    with tempfile.TemporaryDirectory(prefix="oddbranch-warm-") as name:
        serve(Path(name))
        if sys.argv[1] == "all":
            learn(Path(name))


if __name__ == "__main__":
    main()
