"""Published and reference tables of `tests/data`, each with its source in its first lines."""

from __future__ import annotations

import csv
from pathlib import Path

DATA = Path(__file__).parent / "data"


def table(name: str) -> list[dict[str, str]]:
    """Rows of a table, comments left out."""
    lines = (DATA / f"{name}.csv").read_text("utf-8").splitlines()
    return list(csv.DictReader(line for line in lines if not line.startswith("#")))
