"""A fingerprint of the plant's source files, so that no stale machine code is run.

numba keeps compiled code as long as the file of the outermost function is unchanged, and
does not see that a function it calls lies in another file that did change. The fingerprint
goes into the outermost function's signature, and with it into what numba looks up.
"""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Final


def fingerprint(folder: Path) -> str:
    """Return a hash of all Python files of a folder, 16 hexadecimal digits."""
    digest = hashlib.sha256()
    for path in sorted(folder.glob("*.py")):
        digest.update(path.name.encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()[:16]


SOURCES: Final = fingerprint(Path(__file__).parent)
