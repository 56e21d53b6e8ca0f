"""What to say of a name that is not known: the nearest that is, or those there are."""

from __future__ import annotations

import difflib
from collections.abc import Sequence
from typing import Final

# Names that are told where none is near.
MOST_TOLD: Final = 8


def near_words(name: str, names: Sequence[str]) -> str:
    """Return "; the nearest is ..." or "; there are ...", to end a sentence; "" without names.

    Capital and small letters are alike here, as they are to whoever mistypes.
    """
    folded = {known.casefold(): known for known in names}
    near = difflib.get_close_matches(name.casefold(), list(folded), n=1)
    if near:
        return f"; the nearest is {folded[near[0]]!r}"
    if not names:
        return ""
    more = len(names) - MOST_TOLD
    shown = ", ".join(repr(known) for known in names[:MOST_TOLD])
    return f"; there {'is' if len(names) == 1 else 'are'} {shown}" + (
        f" and {more} more" if more > 0 else ""
    )
