"""What a finished run's page says, from its sums and layers."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from importlib.metadata import version
from typing import Any

import numpy as np

from saltrise.engine.account import CAUTIONS, METHOD, alignment, input_dates, parameters
from saltrise.engine.inputs import key_of
from saltrise.engine.pictures import Finished, page_maps, zone_rows
from saltrise.engine.soils import profile_of
from saltrise.layers import MASK_REASONS
from saltrise.report.page import curve_chart, render
from saltrise.zonal import REGION, SALT_EDGES_G_PER_L, SALT_NAMES
from saltrise.zone_table import CLASS_COLUMNS, DEPTH_COLUMNS, region_figures

_DEPTH_NAMES = ("under 1 m", "1 to under 2 m", "2 to under 3 m", "3 m and more")
_MOST_CURVES = 12
_MOST_DETAILED, _MOST_WIDE = 400, 2000
"""Districts with bars and crossed areas, and with every column: beyond, the page would swell."""

_BARS, _SAMPLE = 24, 24
"""Bars of an input's histogram, and blocks it is taken from at most."""

_COLUMNS = (
    ("zone_id", "id"),
    ("name", "district"),
    ("rank", "rank"),
    ("salt_load_mean_t_per_ha_per_year", "mean load [t/ha/year]"),
    ("salt_load_t_per_year", "load [t/year]"),
    ("too_shallow_ha", "too shallow [ha]"),
    ("critical_depth_p50_m", "critical depth, half the area [m]"),
    ("critical_depth_p80_m", "critical depth, 80 % [m]"),
    ("depth_mean_m", "mean depth [m]"),
    ("evaporation_mean_mm_per_year", "evaporation [mm/year]"),
    ("area_ha", "area [ha]"),
    ("assessed_ha", "assessed [ha]"),
    ("at_surface_ha", "water at surface [ha]"),
    ("nodata_ha", "no answer [ha]"),
    ("outside_ha", "outside [ha]"),
)


def draw_page(found: Finished) -> str:
    """The page."""
    region, settings = found.region, found.region.settings
    figures = region_figures(found.totals.zones, found.plan.recipe.extra_sums)
    rows = zone_rows(found.table)
    return render(
        {
            "title": settings.title,
            "scheme": region.scheme,
            "date": f"{found.date:%Y-%m-%d}",
            "version": version("saltrise"),
            "answer": _answer(found, figures, rows),
            "cautions": CAUTIONS,
            "method": METHOD,
            "maps": page_maps(found),
            "zones": rows,
            "columns": [
                {"key": key, "label": label, "text": key in ("zone_id", "name")}
                for key, label in (_COLUMNS if len(rows) <= _MOST_WIDE else _COLUMNS[:8])
            ],
            "rank_by": settings.hazard.rank_by.replace("_", " "),
            "bars": [_bar(found, "Region", figures)]
            + [_bar(found, r["name"], r) for r in rows[:_MOST_DETAILED]],
            "crossed": _crossed(found),
            "districts": _districts_crossed(found, rows[:_MOST_DETAILED]),
            "detailed": min(len(rows), _MOST_DETAILED),
            "salt_names": _salt_names(),
            "chart": _chart(found),
            "inputs": _inputs(found),
            "parameters": parameters(region, region.sets[:1]),
            "warnings": found.warnings,
            "masked": _masked(found.totals.counts),
        }
    )


def _answer(found: Finished, figures: Mapping[str, Any], rows: list[dict[str, Any]]) -> list[str]:
    settings, scheme = found.region.settings, found.region.scheme
    assessed = figures["assessed_ha"]
    if not assessed:
        return ["No land could be assessed."]
    worst = figures["high_ha"] + figures["very_high_ha"]
    sentences = [
        f"Of {assessed:,.0f} ha assessed, {worst:,.0f} ha ({100 * worst / assessed:.3g} %) are in "
        f"the classes {scheme.names[3]} and {scheme.names[4]}; groundwater brings a gross "
        f"{figures['salt_load_t_per_year']:,.0f} t of salt a year.",
    ]
    ranked = [row for row in rows if row["rank"] is not None][:3]
    if ranked:
        names = ", ".join(
            f"{row['name']} ({row['salt_load_mean_t_per_ha_per_year']:.3g} t/ha/year)"
            for row in ranked
        )
        by = settings.hazard.rank_by.replace("_", " ")
        sentences.append(f"By {by}, first come {names}.")
    half, most = figures["critical_depth_p50_m"], figures["critical_depth_p80_m"]
    sentences.append(
        f"To keep the load within {settings.hazard.target_load:g} t/ha/year the water table has "
        f"to stay deeper than {half:.2g} m on half of the land and than {most:.2g} m on 80 % of "
        f"it; on {figures['too_shallow_ha']:,.0f} ha it is shallower than it should be."
    )
    return sentences


def _bar(found: Finished, name: str, figures: Mapping[str, Any]) -> dict[str, Any]:
    areas = [figures[column] for column in CLASS_COLUMNS]
    total = sum(areas)
    return {
        "name": name,
        "parts": [
            {
                "area": area,
                "share": 100 * area / total if total else 0.0,
                "colour": colour,
                "dark": sum(rgb) < 330,
                "number": k,
            }
            for k, (area, colour, rgb) in enumerate(
                zip(
                    areas,
                    found.region.scheme.colours,
                    found.region.scheme.rgb().values(),
                    strict=False,
                ),
                start=1,
            )
        ],
    }


def _salt_names() -> list[str]:
    edges = [f"{edge:g}" for edge in SALT_EDGES_G_PER_L]
    spans = [
        f"under {edges[0]} g/L",
        *(f"{a} to under {b} g/L" for a, b in itertools.pairwise(edges)),
        f"{edges[-1]} g/L and more",
    ]
    return [f"{name} ({span})" for name, span in zip(SALT_NAMES, spans, strict=True)]


def _crossed(found: Finished) -> list[tuple[str, list[float]]]:
    """Hectares of the region by depth and salinity class, a row a depth class."""
    areas = found.totals.zones.depth_by_salinity(REGION) / 1e4
    cells = [[float(v) for v in row] for row in areas]
    return list(zip(_DEPTH_NAMES, cells, strict=True))


def _districts_crossed(found: Finished, rows: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """The same for every district, all classes in one row."""
    return [
        {
            "name": row["name"],
            "cells": [
                float(v) for v in found.totals.zones.depth_by_salinity(row["zone"]).ravel() / 1e4
            ],
        }
        for row in rows
    ]


def _chart(found: Finished) -> dict[str, Any] | None:
    """Rise curves of the soils that occur, unless they vary from cell to cell."""
    region, recipe = found.region, found.plan.recipe
    stacks = region.soils.stacks[:_MOST_CURVES]
    if not stacks:
        return None
    deepest = 6.0
    depths = np.linspace(0.1, deepest, 90)
    curves = [
        (
            " over ".join(stack.soils),
            depths,
            profile_of(region.settings, region.sets[0], stack).evaporation(depths)[0],
        )
        for stack in stacks
    ]
    figures = region_figures(found.totals.zones, recipe.extra_sums)
    evaporation = figures["evaporation_mean_mm_per_year"]
    if not evaporation:
        return None
    # Mean salinity of the water that evaporates, and the year's load of 1 mm/day of it.
    tds = 100.0 * figures["salt_load_mean_t_per_ha_per_year"] / evaporation
    load = recipe.days * tds / 100.0
    curves = [(name, depths, rates * load) for name, depths, rates in curves]
    rate = _mean_demand(found) * load
    chart = curve_chart(curves, rate, deepest)
    labels = _spaced(chart["lines"], chart["right"])
    return chart | {"labels": labels, "depths": _depths(found, chart), "tds": f"{tds:.3g}"}


def _mean_demand(found: Finished) -> float:
    """Evaporative demand [mm/day] of the region, midway between its least and greatest; 0 where
    seasons each have their own."""
    recipe = found.plan.recipe
    if len(recipe.seasons) > 1:
        return 0.0
    season = recipe.seasons[0]
    value = recipe.constants.get(season.potential_evaporation)
    seen = found.totals.ranges.get(season.potential_evaporation)
    if value is None and seen is not None and seen.low is not None and seen.high is not None:
        value = (seen.low + seen.high) / 2
    return 0.0 if value is None else value * season.demand_factor / season.days


def _spaced(lines: Sequence[Mapping[str, Any]], right: float) -> list[dict[str, Any]]:
    """Names at the ends of lines, pushed apart so that they can be read."""
    ends = sorted((line["end"][1], line["end"][0], line["name"]) for line in lines if line["end"])
    beside: list[dict[str, Any]] = []
    below: list[dict[str, Any]] = []
    for y, x, name in ends:
        if x < right - 1.0:  # a curve that falls off the chart before its right end
            below.append({"x": x + 4.0, "y": y - 6.0 - 13.0 * len(below), "name": name})
            continue
        least = beside[-1]["y"] + 12.0 if beside else y
        beside.append({"x": right + 6.0, "y": max(y + 4.0, least), "name": name})
    return beside + below


def _depths(found: Finished, chart: Mapping[str, Any]) -> list[dict[str, Any]]:
    figures = region_figures(found.totals.zones, found.plan.recipe.extra_sums)
    total = figures["assessed_ha"] or 1.0
    wide = (chart["right"] - chart["left"]) / 6.0
    edges = (0.0, 1.0, 2.0, 3.0, 6.0)
    return [
        {
            "x": chart["left"] + edges[k] * wide,
            "width": (edges[k + 1] - edges[k]) * wide,
            "text": f"{100 * figures[column] / total:.0f} %",
        }
        for k, column in enumerate(DEPTH_COLUMNS)
    ]


def _inputs(found: Finished) -> list[dict[str, Any]]:
    region, settings = found.region, found.region.settings
    how, dates = alignment(region), input_dates(region)
    rows = []
    for role, aligned in region.inputs.rasters.items():
        seen = found.totals.ranges.get(role)
        rows.append(
            {
                "key": key_of(role),
                "how": f"{len(aligned.mosaic.tiles)} file(s), {how[key_of(role)]}",
                "valid": f"{seen.valid:,}" if seen else "",
                "nodata": f"{seen.nodata:,}" if seen else "",
                "low": f"{seen.low:g}" if seen and seen.low is not None else "",
                "high": f"{seen.high:g}" if seen and seen.high is not None else "",
                "unit": region.inputs.unit_of(settings, role),
                "date": dates[key_of(role)],
                "bars": _histogram(found, role),
            }
        )
    for role, value in region.inputs.constants.items():
        number = {"low": f"{value:g}", "high": f"{value:g}", "valid": "", "nodata": ""}
        unit = region.inputs.unit_of(settings, role)
        where = {"key": key_of(role), "how": "one number", "unit": unit}
        rows.append(where | number | {"date": dates[key_of(role)], "bars": []})
    return rows


def _histogram(found: Finished, role: str) -> list[float]:
    """Shares of an input's values in even steps from its least to its greatest, the largest being
    1, from blocks spread over the region."""
    seen = found.totals.ranges.get(role)
    if seen is None or seen.low is None or seen.high is None or seen.low == seen.high:
        return []
    blocks = list(found.plan.grid.blocks())
    picked = blocks[:: max(1, len(blocks) // _SAMPLE)][:_SAMPLE]
    counts = np.zeros(_BARS)
    for block in picked:
        values = found.plan.readers[role].read(block)
        there = values[np.isfinite(values)]
        counts += np.histogram(there, _BARS, (seen.low, seen.high))[0]
    most = counts.max()
    return [float(count / most) for count in counts] if most > 0 else []


def _masked(counts: Mapping[str, int]) -> list[str]:
    cells = counts["cells"]
    gone = cells - counts["assessed"] - counts["at_surface"]
    lines = [f"{gone:,} of {cells:,} cells have no answer."]
    for reason, text in MASK_REASONS.items():
        if counts.get(reason):
            lines.append(f"{counts[reason]:,} cells: {text}.")
    return lines
