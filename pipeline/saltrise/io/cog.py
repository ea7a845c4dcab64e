"""Cloud-Optimized GeoTIFFs from tile files through GDAL's COG driver."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from xml.sax.saxutils import escape, quoteattr

import rasterio
import rasterio.shutil
from rasterio.errors import RasterioError

from saltrise.errors import RunError
from saltrise.grid import Grid
from saltrise.io import durable
from saltrise.io.vrt import Tile, dataset_xml, plain_band_xml
from saltrise.layers import Layer

_OVERVIEW = {"mean": "AVERAGE", "most frequent": "MODE"}


def virtual_layer(
    grid: Grid,
    layer: Layer,
    tiles: Sequence[Tile],
    tags: Mapping[str, str],
    band_tags: Mapping[str, str],
    colours: Mapping[int, tuple[int, int, int]],
) -> str:
    """One layer of all tiles as a virtual raster that carries every tag of the final file."""
    head = (
        f"{_metadata(band_tags)}<Description>{escape(layer.meaning)}</Description>"
        f"<UnitType>{escape(layer.unit)}</UnitType>"
        f"<NoDataValue>{layer.nodata:g}</NoDataValue>{_palette(colours)}"
    )
    band = plain_band_xml(layer, tiles, head)
    return dataset_xml(
        grid.width, grid.height, grid.crs_wkt, grid.transform, _metadata(tags) + band
    )


def _metadata(tags: Mapping[str, str]) -> str:
    items = "".join(
        f"<MDI key={quoteattr(key)}>{escape(value)}</MDI>" for key, value in tags.items()
    )
    return f"<Metadata>{items}</Metadata>"


def _palette(colours: Mapping[int, tuple[int, int, int]]) -> str:
    if not colours:
        return "<ColorInterp>Gray</ColorInterp>"
    entries = "".join(
        '<Entry c1="{}" c2="{}" c3="{}" c4="{}"/>'.format(
            *colours.get(value, (0, 0, 0)), 255 if value in colours else 0
        )
        for value in range(256)
    )
    return f"<ColorInterp>Palette</ColorInterp><ColorTable>{entries}</ColorTable>"


def write_cog(path: Path, virtual: str, layer: Layer, compression: str, workers: int) -> None:
    """Write a virtual layer as a Cloud-Optimized GeoTIFF, whole or not at all.

    Raises
    ------
    RunError
        GDAL cannot write it; names the file.
    """
    temporary = path.with_name(path.name + ".partial")
    options = {
        "BLOCKSIZE": "512",
        "COMPRESS": compression.upper(),
        "LEVEL": "1" if compression == "zstd" else "6",
        "PREDICTOR": "YES",
        "OVERVIEW_RESAMPLING": _OVERVIEW[layer.overview],
        "BIGTIFF": "IF_SAFER",
        "NUM_THREADS": str(workers),
    }
    try:
        with rasterio.open(virtual) as source:
            rasterio.shutil.copy(source, str(temporary), driver="COG", **options)
        durable.sync_file(temporary)
        temporary.replace(path)
    except OSError as error:
        raise RunError(durable.explain(path, error)) from error
    except RasterioError as error:
        raise RunError(f"{path}: cannot be assembled: {error}") from error
    durable.step(path.name)
