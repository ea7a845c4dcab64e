"""Settings from a config file, a mapping or settings already made."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from saltrise.io.text import read_input
from saltrise.settings import Settings, decode_config, parse_settings, settings_from_mapping


def read_settings(region: str | Path | Settings | Mapping[str, Any]) -> Settings:
    """Settings of a region.

    Parameters
    ----------
    region : path, Settings or mapping
        A TOML file, or its content; a mapping's paths are relative to the working directory.

    Raises
    ------
    InputError
        The file is missing or unreadable, or every fault of its content.
    """
    if isinstance(region, Settings):
        return region
    if isinstance(region, Mapping):
        return settings_from_mapping(region, Path.cwd())
    path = Path(region)
    text = decode_config(read_input(path), str(path))
    return parse_settings(text, str(path), path.absolute().parent)
