"""Which settings there are, read from the shipped files: every key, its comment, its variable.

Both rooms read settings, each its own files; a misspelt variable is nobody's, so whoever
reads any refuses it by this one list. Also what may be shown of a value: no password.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Mapping
from functools import cache

from config import read_shipped

PREFIX = "ODDBRANCH_"
# By file, what stands between the prefix and the section.
OWNERS = {"service.toml": "", "learn.toml": "LEARN__", "nightly.toml": "NIGHTLY__"}
# Variables of the same prefix that belong to the tests.
_OTHERS = "ODDBRANCH_TEST_"

_SECTION = re.compile(r"^\[(\w+)\]$")
# A key that has no default is shown behind a comment sign, indented by nothing else.
_KEY = re.compile(r"^(?:# )?([a-z][a-z0-9_]*) = \S")
_URL_PASSWORD = re.compile(r"(://[^/@:\s]*:).*(?=@)")
_NAMED_PASSWORD = re.compile(r"((?:password|secret|token)=)[^&\s]*", re.IGNORECASE)


@cache
def comments_of(name: str) -> Mapping[tuple[str, str], str]:
    """Return the comment of every key of a shipped file by (section, key), in its order.

    Keys that follow each other without a comment between them share the one above.
    """
    found: dict[tuple[str, str], str] = {}
    section, lines, fresh = "", list[str](), True
    for line in read_shipped(name).splitlines():
        met = _SECTION.match(line)
        key = _KEY.match(line)
        if met:
            section, lines = met[1], []
        elif key and section:
            found[section, key[1]] = " ".join(lines)
            fresh = True
        elif line.startswith("#"):
            lines = [*([] if fresh else lines), line.lstrip("# ")]
            fresh = False
        elif not line:
            lines, fresh = [], True
    return found


def variable_of(name: str, section: str, key: str) -> str:
    """Return the environment variable of a key of a shipped file."""
    return f"{PREFIX}{OWNERS[name]}{section}__{key}".upper()


@cache
def known_variables() -> frozenset[str]:
    """Return the variables of all files."""
    return frozenset(variable_of(name, *key) for name in OWNERS for key in comments_of(name))


def file_with(section: str, key: str) -> str | None:
    """Return the first file that has a key, for whoever wrote it into another."""
    return next((name for name in OWNERS if (section, key) in comments_of(name)), None)


def misspelt(environment: Mapping[str, str]) -> str | None:
    """Return a sentence about a variable that no file knows, or None where there is none."""
    for name in environment:
        if not name.upper().startswith(PREFIX) or name.startswith(_OTHERS):
            continue
        if name.upper() not in known_variables():
            # The prefix that all share would make everything near.
            bare = [one.removeprefix(PREFIX) for one in sorted(known_variables())]
            near = difflib.get_close_matches(name.upper().removeprefix(PREFIX), bare, n=1)
            hint = f"is {PREFIX}{near[0]} meant?" if near else "`oddbranch settings` names them all"
            return f"environment: {name} is not known; {hint}"
    return None


def masked(text: str) -> str:
    """Return a value without its password: where the store is helps whoever looks for it."""
    return _NAMED_PASSWORD.sub(r"\1***", _URL_PASSWORD.sub(r"\1***", text))
