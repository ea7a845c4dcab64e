"""A STAC 1.1 Item that describes a run's folder."""

from __future__ import annotations

import math
import re
import unicodedata
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

from saltrise.layers import layer_of
from saltrise.schemes import Scheme

_EXTENSIONS = (
    "https://stac-extensions.github.io/projection/v2.0.0/schema.json",
    "https://stac-extensions.github.io/raster/v2.0.0/schema.json",
    "https://stac-extensions.github.io/classification/v2.0.0/schema.json",
    "https://stac-extensions.github.io/processing/v1.2.0/schema.json",
    "https://stac-extensions.github.io/file/v2.1.0/schema.json",
)

_COG = "image/tiff; application=geotiff; profile=cloud-optimized"
_TYPES = {
    ".csv": "text/csv",
    ".gpkg": "application/geopackage+sqlite3",
    ".html": "text/html",
    ".json": "application/json",
    ".png": "image/png",
    ".sld": "application/vnd.ogc.sld+xml",
}


@dataclass(frozen=True)
class HandedFile:
    """A file of the folder: its path there, size and SHA-256."""

    path: str
    size: int
    sha256: str


@dataclass(frozen=True)
class Place:
    """Where the grid lies: outline as longitude and latitude, EPSG code if it has one, WKT."""

    outline: Sequence[tuple[float, float]]
    epsg: int | None
    wkt: str
    transform: tuple[float, ...]
    width: int
    height: int


def stac_item(
    title: str,
    description: str,
    date: datetime,
    place: Place,
    scheme: Scheme,
    statistics: Mapping[str, Mapping[str, float]],
    files: Sequence[HandedFile],
    lineage: str,
    versions: Mapping[str, str],
) -> dict[str, Any]:
    """The Item; hrefs are relative to the folder.

    Parameters
    ----------
    title, description, lineage : str
        Of the run.
    date : datetime
        The run's date.
    place : Place
        The grid.
    scheme : Scheme
        The run's class scheme.
    statistics : mapping
        Of each layer's stored values.
    files : sequence of HandedFile
        What the folder holds but this item and run.json.
    versions : mapping
        Software.
    """
    lons, lats = zip(*place.outline, strict=True)
    stamp = date.strftime("%Y-%m-%dT%H:%M:%SZ")
    assets: dict[str, Any] = {}
    for file in files:
        assets[_key(file.path)] = _asset(file, scheme, statistics)
    assets["run_json"] = {
        "href": "./run.json",
        "type": "application/json",
        "title": "Config, inputs, parameters, counts, warnings, versions",
        "roles": ["metadata"],
    }
    return {
        "type": "Feature",
        "stac_version": "1.1.0",
        "stac_extensions": list(_EXTENSIONS),
        "id": _slug(title),
        "geometry": {"type": "Polygon", "coordinates": [[list(p) for p in place.outline]]},
        "bbox": [min(lons), min(lats), max(lons), max(lats)],
        "properties": {
            "datetime": stamp,
            "created": stamp,
            "title": title,
            "description": description,
            "proj:code": f"EPSG:{place.epsg}" if place.epsg else None,
            **({} if place.epsg else {"proj:wkt2": place.wkt}),
            "proj:shape": [place.height, place.width],
            "proj:transform": [*place.transform, 0.0, 0.0, 1.0],
            "processing:lineage": lineage,
            "processing:software": dict(versions),
        },
        "links": [],
        "assets": assets,
    }


def _slug(title: str) -> str:
    plain = unicodedata.normalize("NFC", title)
    return re.sub(r"[^\w]+", "-", plain).strip("-").lower()[:80] or "saltrise-run"


def _key(path: str) -> str:
    return re.sub(r"[^\w]+", "_", path.removeprefix("layers/").removesuffix(".tif"))


def _asset(
    file: HandedFile, scheme: Scheme, statistics: Mapping[str, Mapping[str, float]]
) -> dict[str, Any]:
    end = file.path[file.path.rindex(".") :]
    asset: dict[str, Any] = {
        "href": f"./{file.path}",
        "type": _TYPES.get(end, "application/octet-stream"),
        "roles": ["metadata"],
        "file:size": file.size,
        # A multihash: 0x12 is SHA-256, 0x20 its 32 bytes.
        "file:checksum": f"1220{file.sha256}",
    }
    if end != ".tif":
        roles = {".png": ["overview"], ".csv": ["data"], ".gpkg": ["data"]}
        return asset | {"roles": roles.get(end, ["metadata"])}
    name = file.path.removeprefix("layers/").removesuffix(".tif")
    layer = layer_of(name)
    band: dict[str, Any] = {
        "name": layer.name,
        "description": layer.meaning,
        "data_type": layer.dtype,
        "nodata": layer.nodata,
        "unit": layer.unit,
    }
    found = statistics.get(name)
    if found is not None and all(math.isfinite(v) for v in found.values()):
        band["statistics"] = {
            "minimum": found["minimum"],
            "maximum": found["maximum"],
            "mean": found["mean"],
            "stddev": found["deviation"],
            "count": found["count"],
        }
    if not layer.continuous:
        band["classification:classes"] = [
            {"value": k, "name": _slug(text), "title": label, "color_hint": colour[1:].upper()}
            for k, (text, label, colour) in enumerate(
                zip(scheme.names, scheme.labels(), scheme.colours, strict=True), start=1
            )
        ] + [{"value": 0, "name": "nodata", "nodata": True}]
    return asset | {
        "type": _COG,
        "title": layer.meaning,
        "roles": ["data"],
        "bands": [band],
    }
