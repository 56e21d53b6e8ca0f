"""What to say of a name that is not known: the nearest that is, or those there are."""

from __future__ import annotations

import difflib
from collections.abc import Sequence
from typing import Final

# Names that are told where none is near.
MOST_TOLD: Final = 8


def nearest_words(name: str, names: Sequence[str]) -> str:
    """Return "; the nearest is ...", to end a sentence; "" where none is near.

    Capital and small letters are alike here, as they are to whoever mistypes.
    """
    folded = {known.casefold(): known for known in names}
    near = difflib.get_close_matches(name.casefold(), list(folded), n=1)
    return f"; the nearest is {folded[near[0]]!r}" if near else ""


def near_words(name: str, names: Sequence[str]) -> str:
    """Return the same, or "; there are ..." where none is near; "" without names."""
    nearest = nearest_words(name, names)
    if nearest or not names:
        return nearest
    more = len(names) - MOST_TOLD
    shown = ", ".join(repr(known) for known in names[:MOST_TOLD])
    return f"; there {'is' if len(names) == 1 else 'are'} {shown}" + (
        f" and {more} more" if more > 0 else ""
    )
