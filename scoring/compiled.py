"""How loops over arrays are compiled where counting references to them costs the most."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar, cast

from numba import njit

F = TypeVar("F", bound=Callable[..., object])
_OPTIONS: dict[str, Any] = {"cache": True, "nogil": True, "_nrt": False}


def uncounted(function: F) -> F:
    """Compile a function that only reads arrays and writes into them.

    References to arrays are not counted, which took more time than what is done with them.
    Nothing is lost by it where no array is made or kept, and the compiler refuses what would
    make one.
    """
    return cast(F, njit(**_OPTIONS)(function))
