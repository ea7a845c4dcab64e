"""A region's config: TOML text in, validated settings or every fault at once out."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from saltrise.errors import InputError
from saltrise.settings.faults import model_faults
from saltrise.settings.lines import Key, key_lines
from saltrise.settings.model import RasterInput, Tables
from saltrise.settings.rules import rule_faults
from saltrise.settings.validated import Settings, fault_text

__all__ = ["RasterInput", "Settings", "decode_config", "parse_settings", "settings_from_mapping"]


def decode_config(data: bytes, source: str) -> str:
    """Text of a config file.

    Raises
    ------
    InputError
        It is not UTF-8.
    """
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        raise InputError(
            f"{source}:{line}: is not UTF-8 (byte {data[error.start]:#04x}); save it as UTF-8"
        ) from error


def parse_settings(text: str, source: str, base: Path) -> Settings:
    """Settings from TOML text.

    Parameters
    ----------
    text : str
        The config.
    source : str
        Its file name, for messages.
    base : Path
        Folder that its paths are relative to.

    Raises
    ------
    InputError
        Every fault at once, each as `file:line: key: what is wrong, what is allowed`.
    """
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(_syntax(text, source, error)) from error
    return _settings(raw, source, base, key_lines(text))


def _syntax(text: str, source: str, error: tomllib.TOMLDecodeError) -> str:
    message = str(error)
    line = text.count("\n") + 1
    if "(at line " in message:
        message, _, place = message.partition(" (at line ")
        line = int(place.split(",")[0])
    return f"{source}:{line}: not TOML: {message.removesuffix(' (at end of document)')}"


def settings_from_mapping(mapping: Mapping[str, Any], base: Path) -> Settings:
    """Settings from a nested mapping shaped like the TOML file.

    Raises
    ------
    InputError
        Every fault at once.
    """
    return _settings(dict(mapping), "settings", base, {})


def _settings(raw: dict[str, Any], source: str, base: Path, lines: Mapping[Key, int]) -> Settings:
    faults = rule_faults(raw, base)
    tables = None
    try:
        tables = Tables.model_validate(_whole_codes(raw), context={"base": base})
    except ValidationError as error:
        known = {key for key, _ in faults}
        faults += [(key, text) for key, text in model_faults(error) if key not in known]
    if faults or tables is None:
        ordered = sorted(faults, key=lambda fault: _line(lines, fault[0]))
        raise InputError(*(fault_text(source, lines, key, text) for key, text in ordered))
    return Settings(tables, source, base, lines)


def _line(lines: Mapping[Key, int], key: Key) -> int:
    return next((lines[key[:n]] for n in range(len(key), 0, -1) if key[:n] in lines), 1)


def _whole_codes(raw: dict[str, Any]) -> dict[str, Any]:
    """TOML keys are texts; texture codes are whole numbers."""
    soil = raw.get("soil")
    if not isinstance(soil, dict) or not isinstance(soil.get("classes"), dict):
        return raw
    classes = {
        int(code) if str(code).lstrip("-").isdecimal() else str(code): str(name)
        for code, name in soil["classes"].items()
    }
    return raw | {"soil": soil | {"classes": classes}}
