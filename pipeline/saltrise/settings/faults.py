"""What the model objects to, in this project's words."""

from __future__ import annotations

from difflib import get_close_matches
from typing import Any

from pydantic import BaseModel, ValidationError

from saltrise.settings.model import TABLES, SoilLayer, Tables
from saltrise.settings.values import Fault

_KINDS = {
    "float_type": "a number",
    "int_type": "a whole number",
    "string_type": "a text",
    "bool_type": "true or false",
    "list_type": "a list",
    "dict_type": "a table",
    "model_type": "a table",
    "model_attributes_type": "a table",
}

_NAMES = {
    str: "text",
    bool: "true or false",
    int: "number",
    float: "number",
    list: "list",
    dict: "table",
}

_BOUNDS = {
    "greater_than": "greater than {gt:g}",
    "greater_than_equal": "{ge:g} or more",
    "less_than_equal": "{le:g} or less",
    "multiple_of": "a multiple of {multiple_of:g}",
    "finite_number": "finite",
    "too_short": "a list of at least {min_length}",
    "too_long": "a list of at most {max_length}",
}


def model_faults(error: ValidationError) -> list[Fault]:
    """Each objection once, as key path and message."""
    faults: dict[Fault, None] = {}
    for detail in error.errors(include_url=False):
        faults[_fault(dict(detail))] = None
    return list(faults)


def _fault(detail: dict[str, Any]) -> Fault:
    where, kind, value = _location(detail["loc"]), detail["type"], detail["input"]
    context = detail.get("ctx", {})
    if kind == "missing":
        return where, f"missing; {_what(where)}"
    if kind == "extra_forbidden":
        return where, _unknown(where)
    if kind == "literal_error":
        return where, _choice(value, context["expected"])
    if kind == "value_error":
        return where, f"is {value!r}, {context['error']}"
    if kind == "string_too_short":
        return where, "is empty, must be a text"
    if kind in _BOUNDS:
        return where, f"is {_shown(value)}, must be {_BOUNDS[kind].format(**context)}"
    wanted = _KINDS.get(kind, detail["msg"].lower())
    given = _NAMES.get(type(value), type(value).__name__)
    return where, f"is {_shown(value)} ({given}), must be {wanted}"


def _location(loc: tuple[str | int, ...]) -> tuple[str | int, ...]:
    """Without the names a union gives its branches."""
    return tuple(part for part in loc if not (isinstance(part, str) and _is_branch(part)))


def _is_branch(part: str) -> bool:
    return part in ("float", "int", "[key]") or part.startswith(
        ("list[", "constrained", "function")
    )


def _shown(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def _model(where: tuple[str | int, ...]) -> type[BaseModel]:
    """Model of the table that holds a key."""
    names = [str(part) for part in where[:-1] if isinstance(part, str)]
    if names[:2] == ["soil", "layer"]:
        return SoilLayer
    return TABLES.get(names[0], Tables) if names else Tables


def _what(where: tuple[str | int, ...]) -> str:
    if len(where) == 1:
        required = [n for n, f in TABLES[str(where[0])].model_fields.items() if f.is_required()]
        return f"the table needs {', '.join(required)}" if required else "the table is needed"
    field = _model(where).model_fields[str(where[-1])]
    choices = getattr(field.annotation, "__args__", ())
    if choices and all(isinstance(choice, str) for choice in choices):
        return f"allowed: {', '.join(repr(c) for c in choices)}"
    return "it is required"


def _unknown(where: tuple[str | int, ...]) -> str:
    allowed = list(_model(where).model_fields)
    what = "key" if len(where) > 1 else "table or key"
    close = get_close_matches(str(where[-1]), allowed, n=1)
    hint = f"; did you mean {close[0]!r}?" if close else ""
    return f"unknown {what}; allowed: {', '.join(allowed)}{hint}"


def _choice(value: Any, expected: str) -> str:
    allowed = [part.strip(" '") for part in expected.replace(" or ", ", ").split(", ")]
    close = get_close_matches(str(value), allowed, n=1, cutoff=0.4)
    hint = f"; did you mean {close[0]!r}?" if close else ""
    return f"is {_shown(value)}, allowed: {', '.join(repr(a) for a in allowed)}{hint}"
