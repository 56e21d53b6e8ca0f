"""The configuration files that ship with the package, read as package data.

They are the defaults and the worked examples in one: commented TOML that a site
copies and edits. `shipped_names` lists them, `read_shipped` gives one as text.
"""

from __future__ import annotations

from importlib import resources


def shipped_names() -> tuple[str, ...]:
    """Return the names of the shipped files, sorted."""
    entries = resources.files(__name__).iterdir()
    return tuple(sorted(entry.name for entry in entries if entry.name.endswith(".toml")))


def read_shipped(name: str) -> str:
    """Return the text of one shipped file, for example `channels.toml`.

    Raises FileNotFoundError, which names the files that there are, for any other name.
    """
    if name not in shipped_names():
        raise FileNotFoundError(f"no shipped file {name!r}; there are {', '.join(shipped_names())}")
    return resources.files(__name__).joinpath(name).read_text(encoding="utf-8")
