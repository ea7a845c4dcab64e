"""What an input file was: its size and the hash of its bytes."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from pathlib import Path

from saltrise.errors import RunError


@dataclass(frozen=True)
class Fingerprint:
    """A file's size [bytes] and the SHA-256 of its content."""

    size: int
    sha256: str


def fingerprint(path: str) -> Fingerprint:
    """Fingerprint of a whole local file.

    Raises
    ------
    RunError
        The file cannot be read.
    """
    try:
        with Path(path).open("rb") as file:
            digest = hashlib.file_digest(file, "sha256")
            return Fingerprint(file.tell(), digest.hexdigest())
    except OSError as error:
        raise RunError(f"{path}: cannot be read: {error.strerror or error}") from error
