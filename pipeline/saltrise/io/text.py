"""Small text files a user names."""

from __future__ import annotations

from pathlib import Path

from saltrise.errors import InputError


def read_input(path: Path) -> bytes:
    """Bytes of a file the user names.

    Raises
    ------
    InputError
        Missing, a folder, or unreadable.
    """
    try:
        return path.read_bytes()
    except FileNotFoundError as error:
        raise InputError(f"{path}: no such file") from error
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror or error}") from error
