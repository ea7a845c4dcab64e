"""Zone tables as CSV (RFC 4180, UTF-8)."""

from __future__ import annotations

import csv
import io
from pathlib import Path
from typing import Any

from saltrise.io import durable

_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


def write_zones_csv(path: Path, table: dict[str, list[Any]]) -> None:
    """Write a table, a row a zone: numbers in full, empty where undefined.

    A text that a spreadsheet would take for a formula gets one leading apostrophe.

    Raises
    ------
    RunError
        The file cannot be written.
    """
    text = io.StringIO(newline="")
    writer = csv.writer(text)
    writer.writerow(table)
    for row in zip(*table.values(), strict=True):
        writer.writerow([_cell(value) for value in row])
    durable.write_whole(path, [text.getvalue().encode()])


def _cell(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, str):
        return f"'{value}" if value.startswith(_FORMULA_STARTS) else value
    return repr(value)
