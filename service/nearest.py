"""The nearest known name, for messages about a misspelt one."""

from __future__ import annotations

import difflib
from collections.abc import Iterable


def nearest_of(name: str, known: Iterable[str]) -> str | None:
    """Return the known name most like `name`, or None where nothing is near."""
    near = difflib.get_close_matches(name, list(known)[:500], n=1, cutoff=0.6)
    return near[0] if near else None
