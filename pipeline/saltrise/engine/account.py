"""What a run says of itself: tags of its layers and the content of run.json."""

from __future__ import annotations

import json
import os
import time
from collections.abc import Sequence
from dataclasses import asdict
from datetime import UTC, datetime
from importlib.metadata import version
from typing import Any

from saltrise.engine import findings
from saltrise.engine.identity import versions
from saltrise.engine.inputs import base_role, key_of
from saltrise.engine.merge import Totals
from saltrise.engine.region import Region
from saltrise.layers import layer_of
from saltrise.physics.regressions import METHODS
from saltrise.physics.soils import SoilRow, SoilSet, soil_for
from saltrise.zonal import REGION
from saltrise.zone_table import OVER_SUPPLY, region_figures, set_loads

_SHOWN = 10

CAUTIONS = (
    "Screening level: shows where hazard is likely, not what a field holds; verify with field "
    "sampling before acting.",
    "Upper estimate for bare soil with these parameters: steady flow to a bare surface. Vapour "
    "flow, moving water tables, roots and layering can exceed it.",
    "Gross yearly salt rise from groundwater, not the net salt balance and not a river load: salt "
    "that rain, irrigation and drainage leach is not subtracted.",
    "Hazard is the potential for salt to rise; it is not risk, which needs what stands there.",
    "The choice of soil parameter set can change the answer by a factor of ten or more.",
    "Local codes, standards and licensed practice take precedence.",
)


METHOD = (
    "Maximum steady evaporation E from a water table at depth L solves L = integral of "
    "dh / (1 + E/K(h)) (Buckingham-Darcy) for each soil; groundwater evaporation is the lesser of "
    "it and the evaporative demand; salt load [t/ha/year] = evaporation [mm/year] x TDS [g/L] / "
    "100; the critical depth is where the load meets the target load."
)
"""How the numbers come about, in a paragraph."""


def run_date() -> datetime:
    """The run's date: `SOURCE_DATE_EPOCH` if set, else the clock [UTC, whole seconds]."""
    epoch = os.environ.get("SOURCE_DATE_EPOCH")
    return datetime.fromtimestamp(int(epoch) if epoch else int(time.time()), UTC)


_MOST_TAGGED = 200
"""Inputs that a tag lists one by one; more are in run.json alone."""

_NO_SETTINGS = ("title", "abstract", "zones", "output")
"""Parts of the config that decide no cell of a layer, or have a tag of their own."""


def layer_tags(region: Region, inputs: list[dict[str, Any]], date: datetime) -> dict[str, str]:
    """Dataset tags that every layer carries: what it is, and all that its numbers came from."""
    settings = region.settings
    first, *others = [parameters(region, (soils,)) for soils in region.sets] or [
        parameters(region, ())
    ]
    resolved = settings.resolved()
    provenance = {
        "INPUTS": [[entry["file"], entry["sha256"]] for entry in inputs]
        if len(inputs) <= _MOST_TAGGED
        else f"{len(inputs)} files, listed with their SHA-256 in run.json",
        "INPUT_DATES": input_dates(region),
        "SETTINGS": {key: table for key, table in resolved.items() if key not in _NO_SETTINGS},
        "PARAMETERS": first,
        **({"OTHER_PARAMETERS": others} if others else {}),
        "VERSIONS": versions(),
    }
    return {
        "AREA_OR_POINT": "Area",
        "TIFFTAG_SOFTWARE": f"saltrise {version('saltrise')}",
        "TIFFTAG_DATETIME": date.strftime("%Y:%m:%d %H:%M:%S"),
        "TITLE": settings.title,
        **({"ABSTRACT": settings.tables.abstract} if settings.tables.abstract else {}),
        "LINEAGE": METHOD,
        "SOIL_PARAMETERS": first["set"],
        "TARGET_LOAD": f"{settings.hazard.target_load!r} t ha-1 year-1",
        "DAYS_PER_YEAR": f"{settings.days_per_year:g}",
        "PRECISION": settings.output.precision,
        "USE_LIMITS": " ".join(CAUTIONS),
        **{name: json.dumps(told, ensure_ascii=False) for name, told in provenance.items()},
    }


def run_record(
    region: Region,
    totals: Totals,
    inputs: list[dict[str, Any]],
    date: datetime,
    worst: list[dict[str, Any]],
    doubts: list[str],
    extras: Sequence[str],
) -> dict[str, Any]:
    """Content of run.json; equal for equal inputs, versions and date."""
    grid = region.inputs.grid
    return {
        "program": "saltrise",
        "date": date.strftime("%Y-%m-%dT%H:%M:%SZ"),
        "title": region.settings.title,
        "abstract": region.settings.tables.abstract,
        "config": region.settings.resolved(),
        "inputs": inputs,
        "input_dates": input_dates(region),
        "alignment": alignment(region),
        "grid": {
            "crs": grid.crs_wkt,
            "transform": list(grid.transform),
            "width": grid.width,
            "height": grid.height,
        },
        "parameters": parameters(region, region.sets[:1]),
        **_several_sets(region, totals, extras),
        "hazard_scheme": asdict(region.scheme),
        "counts_cells": totals.counts,
        "region": region_figures(totals.zones, extras),
        "worst_zones": worst,
        "statistics": {name: asdict(found) for name, found in totals.statistics.items()},
        "layers": {
            name: {"unit": layer_of(name).unit, "meaning": layer_of(name).meaning}
            for name in region.settings.layers
        },
        "warnings": doubts,
        "lineage": METHOD,
        "use_limits": list(CAUTIONS),
        "versions": versions(),
    }


def run_warnings(region: Region, totals: Totals, table: dict[str, list[Any]]) -> list[str]:
    """Everything a user should doubt about a finished run."""
    supply = region.zones.supply_mm_per_year if region.zones is not None else ()
    return [
        *region.warnings,
        *findings.warnings(region.settings, totals.ranges),
        *_slow(totals.counts),
        *supply_warnings(table, supply),
        *outside_warnings(region, totals.counts),
    ]


def _slow(counts: dict[str, int]) -> list[str]:
    slow = counts.get("slower_than_season", 0)
    if not slow:
        return []
    share = 100 * slow / max(counts["assessed"], 1)
    return [
        f"response_time: in {slow:,} cells ({share:.3g} % of the assessed) the rise needs longer "
        "than the season to become steady; there a steady rate is no more than a tendency"
    ]


def supply_warnings(table: dict[str, list[Any]], supply: Sequence[float | None]) -> list[str]:
    """Zones where more water would evaporate than reaches the water table."""
    if not supply:
        return []
    over = [
        id_
        for id_, share, given in zip(table["zone_id"], table[OVER_SUPPLY], supply, strict=True)
        if given == 0 or (share is not None and share > 1)
    ]
    if not over:
        return []
    more = f" and {len(over) - _SHOWN} more" if len(over) > _SHOWN else ""
    return [
        f"evaporation exceeds the supply of water in zone {', '.join(over[:_SHOWN])}{more}: the "
        "water table would fall, and the load stays below what is shown"
    ]


def alignment(region: Region) -> dict[str, str]:
    """How each raster input reached the region's grid, by config key."""
    return {key_of(r): aligned.describe() for r, aligned in region.inputs.rasters.items()}


def input_dates(region: Region) -> dict[str, str]:
    """Date of each input by config key: the config's, or what its files' tags say."""
    settings = region.settings
    tables = {
        **dict.fromkeys(("texture", "sand", "clay", "silt"), settings.soil.date),
        **dict.fromkeys(("depth", "elevation", "ground"), settings.water_table.date),
        "salinity": settings.groundwater.date,
        "potential_evaporation": settings.climate.date,
    }
    dates = {}
    for role in (*region.inputs.rasters, *region.inputs.constants):
        aligned = region.inputs.rasters.get(role)
        files = aligned.mosaic.tiles if aligned is not None else ()
        tagged = sorted({tile.file.date for tile in files if tile.file.date})
        said = " to ".join(dict.fromkeys((tagged[0], tagged[-1]))) if tagged else ""
        dates[key_of(role)] = tables.get(base_role(role)) or said or "not given"
    return dates


def _numbers(row: SoilRow) -> dict[str, Any]:
    return {"texture": row.texture} | vars(row.profile) | {"source": row.source}


def _several_sets(region: Region, totals: Totals, extras: Sequence[str]) -> dict[str, Any]:
    """What the choice of soil parameter set does to the region's total; nothing for one set."""
    if len(region.sets) < 2:
        return {}
    names = [soils.name for soils in region.sets]
    loads = dict(zip(names, set_loads(totals.zones, REGION, extras), strict=True))
    return {
        "other_parameters": [parameters(region, (soils,)) for soils in region.sets[1:]],
        "salt_load_by_set_t_per_year": loads,
    }


def parameters(region: Region, sets: Sequence[SoilSet]) -> dict[str, Any]:
    """The parameter values of a set that are used, with their sources; or the regression."""
    if not sets:
        name = region.settings.soil.method
        method = METHODS[name]
        return {
            "set": name,
            "title": method.source,
            "conductivity": "saxton-rawls" if name == "saxton-rawls2006" else "campbell",
            "ranges": {role: list(ends) for role, ends in method.ranges.items()},
            "ranges_source": method.range_source,
            "classes": [],
        }
    soils = sets[0]
    return {
        "set": soils.name,
        "title": soils.title,
        "conductivity": soils.conductivity,
        "classes": [_numbers(soil_for(soils, texture)) for texture in region.soils.textures],
    }


def outside_warnings(region: Region, counts: dict[str, int]) -> list[str]:
    """Cells whose fractions lie outside the regression's range."""
    outside = counts.get("outside_range", 0)
    if not outside:
        return []
    method = METHODS[region.settings.soil.method]
    units = {"bulk_density": "g/cm3"}
    ranges = ", ".join(
        f"{role.replace('_', ' ')} {low:g} to {high:g} {units.get(role, '%')}"
        for role, (low, high) in method.ranges.items()
    )
    return [
        f"soil.method: {outside:,} cells lie outside the range of {region.settings.soil.method} "
        f"({ranges}) or of what its results can mean; they are held at its edge"
    ]
