"""Zone tables as CSV (RFC 4180, UTF-8)."""

from __future__ import annotations

import csv
import io
from pathlib import Path
from typing import Any

from saltrise.errors import InputError
from saltrise.io import durable

_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


def write_csv(path: Path, table: dict[str, list[Any]]) -> None:
    """Write a table by columns: numbers in full, empty where undefined.

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


def read_points(path: Path) -> list[tuple[float, float]]:
    """Points of a CSV with columns `x` and `y`; others are ignored.

    Raises
    ------
    InputError
        The file is unreadable, lacks a column or holds what is no number; names the line.
    """
    try:
        text = path.read_text("utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: cannot be read: {error}") from error
    rows = csv.DictReader(io.StringIO(text))
    missing = [name for name in ("x", "y") if name not in (rows.fieldnames or ())]
    if missing:
        raise InputError(f"{path}:1: missing column {', '.join(missing)}; needs x and y")
    points, faults = [], []
    for row in rows:
        try:
            points.append((float(row["x"]), float(row["y"])))
        except (TypeError, ValueError):
            faults.append(f"{path}:{rows.line_num}: x {row['x']!r}, y {row['y']!r}: no numbers")
    if faults:
        raise InputError(*faults)
    return points
