"""Rules of `[[season]]`, from the raw content, so that they speak up beside other faults."""

from __future__ import annotations

import math
from typing import Any

from saltrise.layers import SEASONS, season_folder
from saltrise.settings.values import Fault, is_number, not_negative

YEAR_DAYS = (365, 366)


def all_seasons_have(seasons: Any, key: str) -> bool:
    """Whether there are seasons and each gives a key."""
    return (
        isinstance(seasons, list)
        and bool(seasons)
        and all(isinstance(season, dict) and key in season for season in seasons)
    )


def season_faults(seasons: Any, water: dict[str, Any], output: dict[str, Any]) -> list[Fault]:
    """Every broken rule of the seasons, as key path and message."""
    if seasons is None:
        return _without(output)
    if not isinstance(seasons, list) or not all(isinstance(s, dict) for s in seasons):
        return []
    if not seasons:
        return [(("season",), "is empty; leave it out, or give at least one [[season]]")]
    faults = _days(seasons) + _names(seasons)
    if "depth" not in water and "ground" not in water and "elevation" not in water:
        given = any("depth" in season for season in seasons)
        faults += [
            (("season", k, "depth"), "missing; water_table.depth is not given either")
            for k, season in enumerate(seasons)
            if given and "depth" not in season
        ]
    for k, season in enumerate(seasons):
        for key in ("potential_evaporation", "salinity", "rain", "irrigation"):
            faults += not_negative(season, "season", k, key)
    return faults


def _without(output: dict[str, Any]) -> list[Fault]:
    """What is asked for that only seasons give."""
    layers = output.get("layers")
    faults: list[Fault] = [
        (("output", "layers"), f"holds {name!r}, which needs [[season]] tables")
        for name in SEASONS
        if isinstance(layers, list) and name in layers
    ]
    if output.get("season_layers") is True:
        faults.append((("output", "season_layers"), "is true, but there is no [[season]]"))
    return faults


def _days(seasons: list[dict[str, Any]]) -> list[Fault]:
    days = [season.get("days") for season in seasons]
    numbers = [n for n in days if is_number(n) and n > 0]
    if len(numbers) < len(days):
        return []
    total = math.fsum(numbers)
    if any(math.isclose(total, year, abs_tol=1e-6) for year in YEAR_DAYS):
        return []
    text = f"days of all seasons add up to {total:g}, must be 365 or 366"
    return [(("season", len(seasons) - 1, "days"), text)]


def _names(seasons: list[dict[str, Any]]) -> list[Fault]:
    faults: list[Fault] = []
    seen: dict[str, str] = {}
    for k, season in enumerate(seasons):
        name = season.get("name")
        if not isinstance(name, str):
            continue
        folder = season_folder(name).casefold()
        if folder in seen:
            what = "twice" if seen[folder] == name else f"too like {seen[folder]!r}"
            text = f"is {name!r}, {what}: both make the folder {folder}; rename one"
            faults.append((("season", k, "name"), text))
        seen[folder] = name
    return faults
