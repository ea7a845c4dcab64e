"""GDAL virtual rasters as XML: the one description every reader and the assembly share.

A virtual input is a float raster whose NaN is the mask: declared nodata, masks, gaps between
tiles and everything outside become NaN, integers keep their exact value. So a reader needs no
second channel for the mask, and undeclared nodata cannot slip in as zero.
"""

from __future__ import annotations

from collections.abc import Iterable
from xml.sax.saxutils import escape

from saltrise.grid import Window
from saltrise.io.sources import SourceFile
from saltrise.layers import Layer

_GDAL_TYPE = {"float32": "Float32", "uint8": "Byte"}

Tile = tuple[str, Window]
"""A tile's GeoTIFF as a path GDAL opens, and its place on the layer's grid."""

Rect = tuple[int, int, int, int]
"""Column, row, width, height in cells."""


def dataset_xml(
    width: int, height: int, crs_wkt: str, transform: tuple[float, ...], bands: str
) -> str:
    """A virtual dataset of `width` x `height` cells around the XML of its bands."""
    a, b, c, d, e, f = transform
    gdal_order = ", ".join(repr(v) for v in (c, a, b, f, d, e))
    return (
        f'<VRTDataset rasterXSize="{width}" rasterYSize="{height}">'
        f"<SRS>{escape(crs_wkt)}</SRS><GeoTransform>{gdal_order}</GeoTransform>{bands}</VRTDataset>"
    )


def float_band_xml(dtype: str, sources: Iterable[str]) -> str:
    """A band of GDAL type `dtype` (Float32 or Float64) with NaN where no source has a value."""
    return (
        f'<VRTRasterBand dataType="{dtype}" band="1"><NoDataValue>nan</NoDataValue>'
        f"{''.join(sources)}</VRTRasterBand>"
    )


def plain_band_xml(layer: Layer, tiles: Iterable[Tile], head: str) -> str:
    """A band of stored values in tiles, with `head` (tags, nodata) before its sources."""
    sources = "".join(
        placed(
            path,
            (0, 0, window.width, window.height),
            (window.col, window.row, window.width, window.height),
        )
        for path, window in tiles
    )
    kind = _GDAL_TYPE[layer.dtype]
    return f'<VRTRasterBand dataType="{kind}" band="1">{head}{sources}</VRTRasterBand>'


def placed(path: str, source: Rect, target: Rect, extra: str = "", kind: str = "Simple") -> str:
    """One source: its file and the rectangle it fills, cell for cell."""
    sx, sy, sw, sh = source
    tx, ty, tw, th = target
    return (
        f"<{kind}Source>"
        # Not shared: a handle shared between threads corrupts reads.
        f'<SourceFilename relativeToVRT="0" shared="0">{escape(path)}</SourceFilename>'
        f"<SourceBand>1</SourceBand>"
        f'<SrcRect xOff="{sx}" yOff="{sy}" xSize="{sw}" ySize="{sh}"/>'
        f'<DstRect xOff="{tx}" yOff="{ty}" xSize="{tw}" ySize="{th}"/>'
        f"{extra}</{kind}Source>"
    )


def masked_source(file: SourceFile, nodata: float | None, source: Rect, target: Rect) -> str:
    """One input file with its nodata (declared and configured) turned into NaN.

    `nodata` is the config's own value and is compared with the file's raw numbers; a scale and
    offset of the band are applied after that.
    """
    path, wanted = file.path, nodata
    own = file.masked or (file.nodata is not None and file.nodata != nodata)
    if nodata is None:
        wanted = file.nodata
    elif own:
        path = _own_mask_applied(file)
    return placed(path, source, target, _value_xml(file, path, wanted), kind="Complex")


def _own_mask_applied(file: SourceFile) -> str:
    # A source carries one nodata; a second one takes a virtual raster of its own underneath.
    whole = (0, 0, file.width, file.height)
    extra = (
        f"<NODATA>{file.nodata!r}</NODATA>"
        if file.nodata is not None
        else "<UseMaskBand>true</UseMaskBand>"
    )
    band = float_band_xml("Float64", [placed(file.path, whole, whole, extra, kind="Complex")])
    return dataset_xml(file.width, file.height, file.crs_wkt, file.transform, band)


def _value_xml(file: SourceFile, path: str, nodata: float | None) -> str:
    parts = []
    if (file.scale, file.offset) != (1.0, 0.0):
        parts.append(f"<ScaleOffset>{file.offset!r}</ScaleOffset>")
        parts.append(f"<ScaleRatio>{file.scale!r}</ScaleRatio>")
    if nodata is not None:
        parts.append(f"<NODATA>{nodata!r}</NODATA>")
    elif file.masked and path == file.path:
        parts.append("<UseMaskBand>true</UseMaskBand>")
    return "".join(parts)
