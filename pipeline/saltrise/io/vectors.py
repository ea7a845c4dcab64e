"""Zone polygons: read, check, mend, bring onto the grid, and write with their table."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from difflib import get_close_matches
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyproj
import shapely
from shapely.geometry.base import BaseGeometry

from saltrise.errors import InputError
from saltrise.grid import Grid
from saltrise.io.ground import ellipsoid_area, on_grid, outside_area

if TYPE_CHECKING:
    import geopandas

    from saltrise.settings import Settings

_SHOWN = 10


@dataclass(frozen=True)
class Zones:
    """Zones of a region.

    `geometries` lie in the file's own CRS, mended; `grid_geometries` in the grid's CRS;
    `area_m2` is each polygon's area on the ellipsoid, `outside_m2` that of its part beyond the
    grid.
    """

    ids: tuple[str, ...]
    names: tuple[str, ...]
    geometries: tuple[BaseGeometry, ...]
    grid_geometries: tuple[BaseGeometry, ...]
    area_m2: tuple[float, ...]
    outside_m2: tuple[float, ...]
    crs_wkt: str
    warnings: tuple[str, ...]
    supply_mm_per_year: tuple[float | None, ...] = ()
    """Water that reaches each zone's water table, where the file has such a field."""


SUPPLY = "supply_mm_per_year"
"""Field of zones that evaporation is compared with."""


def read_zones(settings: Settings, grid: Grid) -> Zones:
    """Read and check the zones a config names.

    Parameters
    ----------
    settings : Settings
        The region; `settings.zones` is set.
    grid : Grid
        The region's grid.

    Raises
    ------
    InputError
        Every fault of file, layer, fields, ids and geometries, with the config's line.
    """
    assert settings.zones is not None
    frame = _read(settings, settings.zones_file, settings.zones.layer)
    ids, names, faults = _labels(settings, frame)
    faults += _geometry_faults(settings, frame, ids)
    supply, more = _supply(settings, frame, ids)
    faults += more
    if faults:
        raise InputError(*faults)
    geometries, warnings = _mended(frame.geometry.to_list(), ids)
    flat = [id_ for id_, geometry in zip(ids, geometries, strict=True) if geometry.area == 0]
    if flat:
        raise InputError(
            settings.fault(
                "zones.file", f"zones must be polygons with an area, no area in zone {_some(flat)}"
            )
        )
    crs = pyproj.CRS(frame.crs)
    try:
        placed = [on_grid(geometry, crs, grid) for geometry in geometries]
        areas = [ellipsoid_area(geometry, crs) for geometry in geometries]
        outside = [outside_area(geometry, grid) for geometry in placed]
    except InputError as error:
        raise InputError(settings.fault("zones.file", str(error))) from error
    beyond = [
        id_ for id_, out, area in zip(ids, outside, areas, strict=True) if out >= area * 0.999
    ]
    if len(beyond) == len(ids):
        raise InputError(settings.fault("zones.file", _all_outside(placed, grid)))
    partly = [id_ for id_, out in zip(ids, outside, strict=True) if out > 0 and id_ not in beyond]
    warnings += _outside_warnings(beyond, partly)
    return Zones(
        tuple(ids),
        tuple(names),
        tuple(geometries),
        tuple(placed),
        tuple(areas),
        tuple(outside),
        crs.to_wkt(),
        tuple(warnings),
        supply,
    )


def _read(settings: Settings, path: Path, layer: str | None) -> geopandas.GeoDataFrame:
    if not path.exists():
        raise InputError(settings.fault("zones.file", f"no such file: {path}"))
    # Taken in here, with all they bring, for runs with zones alone.
    import geopandas
    import pyogrio
    from pyogrio.errors import DataSourceError

    try:
        layers = [str(name) for name, _ in pyogrio.list_layers(path)]
        if layer is None and len(layers) > 1:
            raise InputError(
                settings.fault(
                    "zones.file",
                    f"{path} holds layers {', '.join(layers)}; name one in zones.layer",
                )
            )
        if layer is not None and layer not in layers:
            raise InputError(
                settings.fault(
                    "zones.layer", f"is {layer!r}, {path} holds {', '.join(layers) or 'no layer'}"
                )
            )
        frame = geopandas.read_file(path, layer=layer or (layers[0] if layers else None))
    except (DataSourceError, ValueError, OSError) as error:
        message = f"{path}: cannot be read as a vector file: {error}"
        raise InputError(settings.fault("zones.file", message)) from error
    if not isinstance(frame, geopandas.GeoDataFrame):
        raise InputError(settings.fault("zones.file", f"{path}: has no geometry"))
    if len(frame) == 0:
        raise InputError(settings.fault("zones.file", f"{path}: has no features"))
    if frame.crs is None:
        message = f"{path}: has no coordinate reference system; assign the one it was made in"
        raise InputError(settings.fault("zones.file", message))
    return frame


def _supply(
    settings: Settings, frame: geopandas.GeoDataFrame, ids: list[str]
) -> tuple[tuple[float | None, ...], list[str]]:
    """Values of the field `SUPPLY`, None where empty; nothing where there is no such field."""
    if SUPPLY not in frame.columns:
        return (), []
    import pandas as pd

    values = pd.to_numeric(frame[SUPPLY], errors="coerce").to_numpy(dtype=np.float64)
    text = frame[SUPPLY].notna().to_numpy() & np.isnan(values)
    wrong = [id_ for id_, bad in zip(ids, text | (values < 0), strict=True) if bad]
    if wrong:
        rule = f"field {SUPPLY} must be a number of mm/year, 0 or more; is not in zone"
        return (), [settings.fault("zones.file", f"{rule} {_some(wrong)}")]
    return tuple(None if np.isnan(v) else float(v) for v in values), []


def _labels(
    settings: Settings, frame: geopandas.GeoDataFrame
) -> tuple[list[str], list[str], list[str]]:
    """Ids, names and faults."""
    zones = settings.zones
    assert zones is not None
    fields = [str(column) for column in frame.columns if column != frame.geometry.name]
    faults = []
    id_field, name_field = zones.id or "code", zones.name or "name"
    for key, field, asked in (("zones.id", id_field, True), ("zones.name", name_field, zones.name)):
        if asked and field not in fields:
            close = get_close_matches(field, fields, n=1)
            hint = f"; did you mean {close[0]!r}?" if close else ""
            faults.append(
                settings.fault(key, f"no field {field!r}; the file has {', '.join(fields)}{hint}")
            )
    if faults:
        return [], [], faults
    ids = [_text(value) for value in frame[id_field]]
    names = [_text(value) for value in frame[name_field]] if name_field in fields else list(ids)
    empty = [str(row + 1) for row, id_ in enumerate(ids) if not id_]
    if empty:
        faults.append(
            settings.fault("zones.id", f"field {id_field!r} is empty in feature {_some(empty)}")
        )
    twice = [f"{id_!r} ({n} times)" for id_, n in Counter(ids).items() if n > 1 and id_]
    if twice:
        faults.append(
            settings.fault(
                "zones.id", f"ids must be unique, field {id_field!r} repeats {_some(twice)}"
            )
        )
    return ids, [n or i for n, i in zip(names, ids, strict=True)], faults


def _text(value: Any) -> str:
    import pandas as pd

    if pd.isna(value):
        return ""
    if isinstance(value, float | np.floating) and float(value).is_integer():
        return str(int(value))
    return str(value).strip()


def _some(items: list[str]) -> str:
    more = f" and {len(items) - _SHOWN} more" if len(items) > _SHOWN else ""
    return ", ".join(items[:_SHOWN]) + more


def _geometry_faults(
    settings: Settings, frame: geopandas.GeoDataFrame, ids: list[str]
) -> list[str]:
    labels = ids or [f"feature {row + 1}" for row in range(len(frame))]
    empty, other = [], []
    for label, geometry in zip(labels, frame.geometry, strict=True):
        if geometry is None or geometry.is_empty:
            empty.append(label)
        elif geometry.geom_type not in ("Polygon", "MultiPolygon"):
            other.append(f"{label} ({geometry.geom_type})")
    faults = []
    if empty:
        faults.append(settings.fault("zones.file", f"no geometry in zone {_some(empty)}"))
    if other:
        faults.append(
            settings.fault("zones.file", f"zones must be polygons, but for {_some(other)}")
        )
    return faults


def _mended(geometries: list[BaseGeometry], ids: list[str]) -> tuple[list[BaseGeometry], list[str]]:
    mended, warnings = [], []
    for geometry, id_ in zip(geometries, ids, strict=True):
        flat = shapely.force_2d(geometry)
        if flat.is_valid:
            mended.append(flat)
            continue
        fixed = _polygons_only(shapely.make_valid(flat))
        before, after = abs(flat.area), fixed.area
        change = f"{100 * (after - before) / before:+.3g} %" if before else "from 0"
        warnings.append(
            f"zones: {id_}: invalid geometry ({shapely.is_valid_reason(flat)}) was mended, "
            f"area {change}"
        )
        mended.append(fixed)
    return mended, warnings


def _polygons_only(geometry: BaseGeometry) -> BaseGeometry:
    parts = [g for g in shapely.get_parts(geometry) if g.geom_type in ("Polygon", "MultiPolygon")]
    return shapely.union_all(parts) if parts else geometry


def _all_outside(placed: list[BaseGeometry], grid: Grid) -> str:
    zones = shapely.total_bounds(np.array(placed, dtype=object))
    corners = [grid.corner(r, c) for r in (0, grid.height) for c in (0, grid.width)]
    xs, ys = zip(*corners, strict=True)
    region = (min(xs), min(ys), max(xs), max(ys))
    return (
        "all zones lie outside the region: their extent (left, bottom, right, top in the region's "
        f"CRS) is {', '.join(f'{v:.10g}' for v in zones)}, the region's "
        f"{', '.join(f'{v:.10g}' for v in region)}; check both CRSs"
    )


def _outside_warnings(beyond: list[str], partly: list[str]) -> list[str]:
    warnings = []
    if beyond:
        warnings.append(f"zones: wholly outside the region: {_some(beyond)}")
    if partly:
        warnings.append(f"zones: partly outside the region: {_some(partly)}")
    return warnings
