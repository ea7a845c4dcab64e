"""A run that is asked to stop does so between two blocks, on every thread."""

from __future__ import annotations

import threading

_ASKED = threading.Event()


class StoppedError(Exception):
    """Work ended early because the run was asked to stop; nothing is wrong with the tile."""


def ask_stop() -> None:
    """Ask all threads of this process to end their tiles."""
    _ASKED.set()


def clear_stop() -> None:
    """Forget an earlier request: a new run begins."""
    _ASKED.clear()


def check_stop() -> None:
    """Raise `StoppedError` if the run was asked to stop."""
    if _ASKED.is_set():
        raise StoppedError
