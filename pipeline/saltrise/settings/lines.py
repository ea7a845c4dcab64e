"""Where each key of a TOML text stands, since the parser does not say."""

from __future__ import annotations

import tomllib
from typing import Any

Key = tuple[str | int, ...]


def key_lines(text: str) -> dict[Key, int]:
    """First line (from 1) of each table header and key of a valid TOML text.

    Statements are told apart by letting the parser itself accept them one by one, so quoting,
    dotted keys, inline tables and values over several lines need no second grammar.
    """
    lines: dict[Key, int] = {}
    counts: dict[Key, int] = {}
    table: Key = ()
    chunk: list[str] = []
    for number, line in enumerate(text.splitlines(), start=1):
        chunk.append(line)
        try:
            content = tomllib.loads("\n".join(chunk))
        except tomllib.TOMLDecodeError:
            continue
        start = number - len(chunk) + 1
        if chunk[0].lstrip().startswith("["):
            table = _header(content, counts)
            lines.setdefault(table, start)
        else:
            for key in _paths(content):
                lines.setdefault(table + key, start)
        chunk = []
    return lines


def _header(content: dict[str, Any], counts: dict[Key, int]) -> Key:
    key: Key = ()
    inside: Any = content
    while inside:
        if isinstance(inside, list):
            counts[key] = counts.get(key, -1) + 1
            key, inside = (*key, counts[key]), inside[0]
            continue
        name = next(iter(inside))
        key, inside = (*key, name), inside[name]
        # A table below an array of tables belongs to the array's latest element.
        if isinstance(inside, dict) and inside and key in counts:
            key = (*key, counts[key])
    return key


def _paths(content: dict[str, Any]) -> list[Key]:
    found: list[Key] = []
    for name, value in content.items():
        found.append((name,))
        if isinstance(value, dict):
            found += [(name, *rest) for rest in _paths(value)]
    return found
