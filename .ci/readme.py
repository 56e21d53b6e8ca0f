#!/usr/bin/env python3
"""Put the demo's output into README.md as it comes out: `make figures`.

Runs the demo with its published seed and fills what stands between the markers
`<!-- demo: tour -->`, `<!-- demo: tables -->` and `<!-- demo: end -->`.
"""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
README = ROOT / "README.md"


def main() -> None:
    output = run_demo()
    text = README.read_text(encoding="utf-8")
    text = put(text, "tour", tour(output))
    text = put(text, "tables", tables(output))
    README.write_text(text, encoding="utf-8")


def run_demo() -> str:
    """Return the demo's output, shown as it comes."""
    words = [sys.executable, "-m", "oddbranch", "demo", "--once"]
    lines = []
    with subprocess.Popen(  # noqa: S603 - our own command, no shell
        words, stdout=subprocess.PIPE, text=True, cwd=ROOT
    ) as demo:
        assert demo.stdout is not None
        for line in demo.stdout:
            sys.stdout.write(line)
            sys.stdout.flush()
            lines.append(line)
    if demo.returncode:
        sys.exit(f"the demo ended with {demo.returncode}; README.md is as it was")
    return "".join(lines)


def put(text: str, name: str, lines: str) -> str:
    """Return the README's text with one part of the demo replaced."""
    before, _, rest = text.partition(f"<!-- demo: {name} -->\n```text\n")
    if not rest:
        sys.exit(f"README.md has no place for the demo's {name}")
    after = rest[rest.index("```\n<!-- demo: end -->") :]
    return f"{before}<!-- demo: {name} -->\n```text\n{lines}{after}"


def tour(output: str) -> str:
    """Return some ten lines: each command with its last words, and the first alert."""
    lines = output.splitlines()
    begun = [i for i, line in enumerate(lines) if line.startswith("$ oddbranch ")]
    survey, learn, serve = begun[:3]
    wrote = next(line for line in lines[survey:learn] if line.startswith("wrote "))
    levels = next(line for line in lines[learn:serve] if line.startswith("levels for "))
    model = next(line for line in lines[learn:serve] if line.startswith("model "))
    alerts = [i for i in range(serve, len(lines)) if re.match(r"\d{4}-\d\d-\d\d ", lines[i])]
    chosen = [lines[survey], wrote, lines[learn], levels, model, *lines[serve : serve + 2]]
    return "\n".join([*chosen, *lines[alerts[0] : alerts[1]]]) + "\n"


def tables(output: str) -> str:
    """Return the part from the incidents to what the other methods caught."""
    start = output.index("Incidents by kind and size, seed")
    return output[start : output.index("\n\nAdvice", start)] + "\n"


if __name__ == "__main__":
    main()
