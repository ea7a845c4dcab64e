"""How a loop over cells is compiled."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar, cast

from numba import njit

Loop = TypeVar("Loop", bound=Callable[..., Any])


def compiled(loop: Loop) -> Loop:
    """A function of arrays and numbers as machine code, made when it is first called.

    It runs without the interpreter's lock, so that threads work side by side, and rounds every
    step as written, so that unlike processors agree. Machine code is kept beside the source file,
    in the user's cache folder where that cannot be written, or made anew by each process where
    neither can.
    """
    try:
        made = njit(nogil=True, cache=True, error_model="numpy")(loop)
    except RuntimeError:
        made = njit(nogil=True, error_model="numpy")(loop)
    return cast(Loop, made)
