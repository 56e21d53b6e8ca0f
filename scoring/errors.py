"""The refusals that a user can meet, as one family of exceptions.

Every class carries the data of its sentence as attributes, and the exit code the
command ends with. The command prints the sentence once, in one place.
"""

from __future__ import annotations


class OddbranchError(Exception):
    """A refusal with a sentence that names the thing, the place and the way out."""

    exit_code = 1


class BadChannelTable(OddbranchError):
    """A channel table that cannot be used; `place` says where in which file."""

    def __init__(self, place: str, what: str) -> None:
        self.place, self.what = place, what
        super().__init__(f"{place}: {what}")


class BadArtefact(OddbranchError):
    """A model directory that cannot be read: missing, damaged, or of another format."""

    def __init__(self, place: str, what: str) -> None:
        self.place, self.what = place, what
        super().__init__(f"{place}: {what}")
