"""Zone rows and region figures from merged sums: columns, percentiles, ranks."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.zonal import BIN_SHIFT, QUANTITIES, REGION, ZoneTotals

Row = dict[str, Any]

CLASS_COLUMNS = ("very_low_ha", "low_ha", "moderate_ha", "high_ha", "very_high_ha")
DEPTH_COLUMNS = ("depth_under_1_ha", "depth_1_to_2_ha", "depth_2_to_3_ha", "depth_over_3_ha")

RANKED_SHARE = 0.6
"""A zone assessed on less than this share of its area has no rank."""

RANK_COLUMNS = {
    "mean": "salt_load_mean_t_per_ha_per_year",
    "total": "salt_load_t_per_year",
    "too_shallow": "too_shallow_ha",
}

WATER_COLUMNS = {
    "net_demand": "net_demand_mean_mm_per_year",
    "percolation": "percolation_mean_mm_per_year",
}
"""Columns of what seasons add, by the sum they are the mean of."""

OVER_SUPPLY = "evaporation_over_supply"
"""Column of a zone's mean evaporation over its supply."""

MEANINGS: dict[str, tuple[str, str]] = {
    "zone_id": ("", "id of the zone"),
    "name": ("", "name of the zone"),
    "area_ha": ("ha", "area of the polygon on the ellipsoid"),
    "assessed_ha": ("ha", "cells with every input, water below the surface"),
    "assessed_share": ("1", "assessed over area"),
    "at_surface_ha": ("ha", "water at or above the surface"),
    "nodata_ha": ("ha", "cells that lack an input or are no soil"),
    "outside_ha": ("ha", "beyond the grid"),
    "depth_mean_m": ("m", "mean depth to water table"),
    "depth_under_1_ha": ("ha", "depth to water table under 1 m"),
    "depth_1_to_2_ha": ("ha", "depth to water table from 1 to under 2 m"),
    "depth_2_to_3_ha": ("ha", "depth to water table from 2 to under 3 m"),
    "depth_over_3_ha": ("ha", "depth to water table 3 m and more"),
    "evaporation_mean_mm_per_year": ("mm year-1", "mean groundwater evaporation"),
    "salt_load_t_per_year": ("t year-1", "gross salt rise"),
    "salt_load_mean_t_per_ha_per_year": ("t ha-1 year-1", "mean gross salt rise"),
    "salt_load_p10_t_per_ha_per_year": ("t ha-1 year-1", "load that 10 % of the area stays under"),
    "salt_load_p50_t_per_ha_per_year": ("t ha-1 year-1", "load that half the area stays under"),
    "salt_load_p90_t_per_ha_per_year": ("t ha-1 year-1", "load that 90 % of the area stays under"),
    "critical_depth_p50_m": ("m", "depth that keeps half the area within the target load"),
    "critical_depth_p80_m": ("m", "depth that keeps 80 % of the area within the target load"),
    "depth_margin_mean_m": ("m", "mean of depth minus critical depth"),
    "too_shallow_ha": ("ha", "water table shallower than the critical depth"),
    "very_low_ha": ("ha", "hazard class 1"),
    "low_ha": ("ha", "hazard class 2"),
    "moderate_ha": ("ha", "hazard class 3"),
    "high_ha": ("ha", "hazard class 4"),
    "very_high_ha": ("ha", "hazard class 5"),
    "at_surface_salt_load_t_per_year": ("t year-1", "salt rise of cells with water at the surface"),
    "rank": ("", "1 is the worst; empty under 60 % assessed"),
    "salt_load_lowest_set_t_per_year": ("t year-1", "lowest total among the parameter sets"),
    "salt_load_highest_set_t_per_year": ("t year-1", "highest total among the parameter sets"),
    WATER_COLUMNS["net_demand"]: ("mm year-1", "mean demand that rain and irrigation leave"),
    WATER_COLUMNS["percolation"]: ("mm year-1", "mean of rain and irrigation beyond the demand"),
    OVER_SUPPLY: ("1", "mean evaporation over the zone's supply; above 1 it cannot last"),
}
"""Unit and meaning of every column a zone table can have."""

_HA = 1e4


def zone_table(
    totals: ZoneTotals,
    ids: Sequence[str],
    names: Sequence[str],
    area_m2: Sequence[float],
    outside_m2: Sequence[float],
    rank_by: str,
    extras: Sequence[str] = (),
    supply: Sequence[float | None] = (),
) -> dict[str, list[Any]]:
    """The table of zones, a list a column, in the order of `ids`.

    Parameters
    ----------
    totals : ZoneTotals
        Merged sums; zone k is `ids[k]`.
    ids, names : sequences of str
        Of the zones.
    area_m2, outside_m2 : sequences of float
        Area of each polygon and of its part beyond the grid, on the ellipsoid [m2].
    rank_by : str
        "mean", "total" or "too_shallow".
    extras : sequence of str
        Names of what the totals sum up beside the fixed figures (`Recipe.extra_sums`).
    supply : sequence of float or None
        Water that reaches each zone's water table [mm/year], None where not known; empty for no
        comparison.

    Returns
    -------
    dict of lists
        Undefined means and ranks are None; areas of nothing are 0.
    """
    rows = []
    for zone, (id_, name, area, outside) in enumerate(
        zip(ids, names, area_m2, outside_m2, strict=True)
    ):
        figures = zone_figures(totals, zone)
        share = figures["assessed_ha"] * _HA / area if area > 0 else 0.0
        place = {
            "zone_id": id_,
            "name": name,
            "area_ha": area / _HA,
            "assessed_ha": figures["assessed_ha"],
            "assessed_share": share,
            "at_surface_ha": figures["at_surface_ha"],
            "nodata_ha": figures["nodata_ha"],
            "outside_ha": outside / _HA,
        }
        rows.append(place | {k: v for k, v in figures.items() if k not in place})
    _rank(rows, RANK_COLUMNS[rank_by])
    rows = [row | extra_figures(totals, zone, extras) for zone, row in enumerate(rows)]
    if supply:
        rows = [row | _over_supply(row, given) for row, given in zip(rows, supply, strict=True)]
    return {column: [row[column] for row in rows] for column in rows[0]} if rows else {}


def _over_supply(row: Row, supply: float | None) -> Row:
    """Evaporation over supply: above 1 more water leaves than comes, which cannot last."""
    evaporation = row["evaporation_mean_mm_per_year"]
    known = supply is not None and supply > 0 and evaporation is not None
    return {OVER_SUPPLY: evaporation / supply if known else None}


def _rank(rows: list[Row], column: str) -> None:
    ranked = [
        row for row in rows if row["assessed_share"] >= RANKED_SHARE and row[column] is not None
    ]
    ranked.sort(key=lambda row: (-row[column], row["zone_id"]))
    for row in rows:
        row["rank"] = None
    for place, row in enumerate(ranked, start=1):
        row["rank"] = place


def region_figures(totals: ZoneTotals, extras: Sequence[str] = ()) -> Row:
    """The figures of the whole region."""
    return zone_figures(totals, REGION) | extra_figures(totals, REGION, extras)


def set_loads(totals: ZoneTotals, zone: int, extras: Sequence[str]) -> list[float]:
    """Salt load of a zone [t/year] under each parameter set, the first being the one in use."""
    others = [
        load
        for name, load in zip(extras, totals.extras(zone), strict=False)
        if name not in WATER_COLUMNS
    ]
    return [load / _HA for load in (totals.sum_of(zone, "salt_load"), *others)]


def extra_figures(totals: ZoneTotals, zone: int, extras: Sequence[str]) -> Row:
    """What the config adds: lowest and highest total among parameter sets, and water means."""
    loads = set_loads(totals, zone, extras)
    figures: Row = {}
    if len(loads) > 1:
        figures = {
            "salt_load_lowest_set_t_per_year": min(loads),
            "salt_load_highest_set_t_per_year": max(loads),
        }
    assessed = float(totals.areas(zone)[1:6].sum())
    for name, total in zip(extras, totals.extras(zone) or [0.0] * len(extras), strict=True):
        if name in WATER_COLUMNS:
            figures[WATER_COLUMNS[name]] = total / assessed if assessed > 0 else None
    return figures


def zone_figures(totals: ZoneTotals, zone: int) -> Row:
    """Figures of one zone from its cells, in the order of the table's columns.

    Means, loads, percentiles and class areas speak of assessed cells: valid, water below surface.
    """
    areas = totals.areas(zone)
    by_class = areas.sum(axis=(1, 2)) / _HA
    by_depth = areas[1:6].sum(axis=(0, 2)) / _HA
    assessed = float(areas[1:6].sum())

    def mean(name: str) -> float | None:
        return totals.sum_of(zone, name) / assessed if assessed > 0 else None

    def percentile(quantity: str, share: float) -> float | None:
        return histogram_percentile(totals, zone, quantity, share)

    figures: Row = {
        "assessed_ha": assessed / _HA,
        "at_surface_ha": float(by_class[6]),
        "nodata_ha": float(by_class[0]),
        "depth_mean_m": mean("depth"),
    }
    figures |= {name: float(by_depth[k]) for k, name in enumerate(DEPTH_COLUMNS)}
    figures |= {
        "evaporation_mean_mm_per_year": mean("evaporation"),
        "salt_load_t_per_year": totals.sum_of(zone, "salt_load") / _HA,
        "salt_load_mean_t_per_ha_per_year": mean("salt_load"),
    }
    for share in (10, 50, 90):
        column = f"salt_load_p{share}_t_per_ha_per_year"
        figures[column] = percentile("salt_load", share / 100)
    figures |= {f"critical_depth_p{s}_m": percentile("critical_depth", s / 100) for s in (50, 80)}
    figures["depth_margin_mean_m"] = mean("depth_margin")
    figures["too_shallow_ha"] = float(areas[1:6, :, 1].sum()) / _HA
    figures |= {name: float(by_class[k]) for k, name in enumerate(CLASS_COLUMNS, start=1)}
    figures["at_surface_salt_load_t_per_year"] = totals.sum_of(zone, "surface_load") / _HA
    return figures


def histogram_percentile(
    totals: ZoneTotals, zone: int, quantity: str, share: float
) -> float | None:
    """Value that `share` of a zone's assessed area does not exceed, within 0.4 %; None without.

    The middle of the first bin whose cumulative weight reaches the share; 0 for the bin of zero.
    """
    histogram = totals.histogram
    mine = _run(histogram.zone, zone, slice(0, histogram.zone.size))
    mine = _run(histogram.quantity, QUANTITIES.index(quantity), mine)
    weight = np.cumsum(histogram.weight[mine])
    if weight.size == 0:
        return None
    first = int(np.searchsorted(weight, share * weight[-1], side="left"))
    return _middle(histogram.bin[mine][min(first, weight.size - 1)])


def _run(ordered: NDArray[np.int64], wanted: int, among: slice) -> slice:
    """Where a number stands in a part of an array that is in order."""
    first, after = np.searchsorted(ordered[among], (wanted, wanted + 1)) + among.start
    return slice(int(first), int(after))


def _middle(bin_: np.int64) -> float:
    if bin_ == 0:
        return 0.0
    edges: NDArray[np.float64] = (np.array([bin_, bin_ + 1]) << BIN_SHIFT).view(np.float64)
    return float(edges.mean())
