"""What rules ask of raw values."""

from __future__ import annotations

from typing import Any, TypeGuard

Fault = tuple[tuple[str | int, ...], str]
"""Key path and message."""


def is_number(value: Any) -> TypeGuard[float]:
    """Whether a raw value is a number."""
    return isinstance(value, int | float) and not isinstance(value, bool)


def not_negative(table: dict[str, Any], *key: str | int) -> list[Fault]:
    """A fault where the last key of the path holds a negative number in its table."""
    value = table.get(str(key[-1]))
    if is_number(value) and value < 0:
        return [(key, f"is {value}, must be 0 or more")]
    return []
