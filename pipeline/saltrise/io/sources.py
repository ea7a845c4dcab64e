"""Raster files as they are: expand a config's paths and read each file's header."""

from __future__ import annotations

import glob
import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import rasterio
from rasterio.enums import ColorInterp, MaskFlags
from rasterio.errors import RasterioError, RasterioIOError

from saltrise.errors import InputError

FLOAT32_EXACT = frozenset({"uint8", "int8", "int16", "uint16", "float32", "float16"})
"""Types whose every value a float32 holds exactly."""

KNOWN_TYPES = FLOAT32_EXACT | {"int32", "uint32", "int64", "uint64", "float64"}


@dataclass(frozen=True)
class SourceFile:
    """Header of one raster file; `transform` are the affine's a, b, c, d, e, f."""

    path: str
    width: int
    height: int
    transform: tuple[float, float, float, float, float, float]
    crs_wkt: str
    dtype: str
    nodata: float | None
    masked: bool
    """A mask or alpha band says which cells count."""
    scale: float
    offset: float
    bands: int
    unit: str
    date: str
    point: bool
    """The file declares cells as points (`AREA_OR_POINT=Point`)."""


_SCHEMES = {
    "http://": "/vsicurl/http://",
    "https://": "/vsicurl/https://",
    "s3://": "/vsis3/",
    "gs://": "/vsigs/",
    "az://": "/vsiaz/",
}
"""Addresses and the paths by which GDAL reads them by blocks instead of as a whole."""


def gdal_path(path: str) -> str:
    """A path or address as GDAL reads it by blocks."""
    for scheme, prefix in _SCHEMES.items():
        if path.startswith(scheme):
            return prefix + path.removeprefix(scheme)
    return path


def is_remote(path: str) -> bool:
    """Whether GDAL, not the file system, resolves this path."""
    return path.startswith("/vsi") or "://" in path


def expand(paths: Sequence[str]) -> tuple[list[str], list[str]]:
    """Files behind a list of paths and patterns, and a fault for each that matches nothing.

    A pattern's files come in the order of their names; a path given twice counts once.
    """
    found: dict[str, None] = {}
    faults: list[str] = []
    for path in paths:
        if is_remote(path) or Path(path).is_file():
            found[gdal_path(path)] = None
            continue
        if Path(path).is_dir():
            faults.append(f"{path} is a folder, must be a raster file or a pattern of files")
            continue
        matches = sorted(glob.glob(path, recursive=True)) if glob.has_magic(path) else []
        files = [match for match in matches if Path(match).is_file()]
        if not files:
            what = "no file matches the pattern" if glob.has_magic(path) else "no such file:"
            faults.append(f"{what} {path}")
        found.update(dict.fromkeys(files))
    return list(found), faults


def read_header(path: str) -> SourceFile:
    """Header of one raster file.

    Raises
    ------
    InputError
        The file cannot be opened, is empty, has no CRS, no georeference, or holds values that
        are not plain numbers; the message names the file and what to do.
    """
    try:
        if not is_remote(path) and Path(path).stat().st_size == 0:
            raise InputError(f"{path}: the file is empty (0 bytes); replace it")
        with rasterio.open(path) as dataset:
            return _header(path, dataset)
    except (RasterioIOError, RasterioError, OSError) as error:
        raise InputError(f"{path}: not a raster GDAL can open: {error}") from error


def _header(path: str, dataset: rasterio.DatasetReader) -> SourceFile:
    if dataset.count == 0:
        raise InputError(f"{path}: holds no raster band; name one of its layers instead")
    if dataset.crs is None:
        raise InputError(
            f"{path}: has no coordinate reference system; assign the one it was made in, "
            "for example with gdal_edit"
        )
    transform = dataset.transform
    if transform.is_identity or transform.determinant == 0 or dataset.gcps[0]:
        raise InputError(f"{path}: has no usable georeference (affine transform); rectify it first")
    if dataset.dtypes[0] not in KNOWN_TYPES:
        raise InputError(f"{path}: band 1: values are {dataset.dtypes[0]}, must be plain numbers")
    flags = dataset.mask_flag_enums[0]
    alpha = ColorInterp.alpha in dataset.colorinterp[1:]
    return SourceFile(
        path=path,
        width=dataset.width,
        height=dataset.height,
        transform=(transform.a, transform.b, transform.c, transform.d, transform.e, transform.f),
        crs_wkt=dataset.crs.to_wkt(),
        dtype=dataset.dtypes[0],
        nodata=_nodata(dataset.nodatavals[0]),
        masked=MaskFlags.per_dataset in flags or alpha,
        scale=float(dataset.scales[0]),
        offset=float(dataset.offsets[0]),
        bands=dataset.count - int(alpha),
        unit=dataset.units[0] or "",
        date=str(dataset.tags().get("TIFFTAG_DATETIME", "")),
        point=dataset.tags().get("AREA_OR_POINT") == "Point",
    )


def _nodata(value: float | None) -> float | None:
    # A NaN nodata needs no translation: NaN is the mask everywhere downstream.
    return None if value is None or math.isnan(value) else float(value)
