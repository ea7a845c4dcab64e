"""One input, many files: tiles of a layer brought onto their common grid."""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import Protocol

from rasterio.crs import CRS
from rasterio.errors import CRSError

from saltrise.errors import InputError
from saltrise.io.sources import FLOAT32_EXACT, SourceFile, expand, read_header
from saltrise.io.vrt import Rect, dataset_xml, float_band_xml, masked_source

ALIGNED = 0.01
"""Cells by which two grids may differ at any corner and still be read cell for cell."""


class Paths(Protocol):
    """A config's raster input."""

    @property
    def paths(self) -> tuple[str, ...]:
        """Paths and patterns."""


@dataclass(frozen=True)
class Placed:
    """A file and the column and row of its first cell on the mosaic's grid."""

    file: SourceFile
    col: int
    row: int

    @property
    def rect(self) -> Rect:
        """Cells of the mosaic that the file covers."""
        return (self.col, self.row, self.file.width, self.file.height)


@dataclass(frozen=True)
class Mosaic:
    """All files of one input on one grid; where files overlap, the first named wins."""

    key: str
    tiles: tuple[Placed, ...]
    width: int
    height: int
    transform: tuple[float, float, float, float, float, float]
    crs_wkt: str
    nodata: float | None
    notes: tuple[str, ...]

    @property
    def dtype(self) -> str:
        """GDAL type that holds every value of every file exactly."""
        narrow = all(
            t.file.dtype in FLOAT32_EXACT and (t.file.scale, t.file.offset) == (1.0, 0.0)
            for t in self.tiles
        )
        return "Float32" if narrow else "Float64"

    @property
    def integer_without_nodata(self) -> bool:
        """Whether cells of an integer file count as valid only because nothing says otherwise."""
        return self.nodata is None and any(
            "int" in t.file.dtype and t.file.nodata is None and not t.file.masked
            for t in self.tiles
        )

    def vrt(self) -> str:
        """The mosaic as a virtual raster on its own grid."""
        return self.vrt_on(self.width, self.height, self.transform, 0, 0)

    def vrt_on(
        self, width: int, height: int, transform: tuple[float, ...], col: int, row: int
    ) -> str:
        """The mosaic cut to a window of its grid that starts at `col`, `row`."""
        sources = []
        # GDAL lets later sources paint over earlier ones.
        for tile in reversed(self.tiles):
            overlap = intersect(tile.rect, (col, row, width, height))
            if overlap is not None:
                x, y, w, h = overlap
                sources.append(
                    masked_source(
                        tile.file,
                        self.nodata,
                        (x - tile.col, y - tile.row, w, h),
                        (x - col, y - row, w, h),
                    )
                )
        return dataset_xml(
            width, height, self.crs_wkt, transform, float_band_xml(self.dtype, sources)
        )

    def overlaps(self) -> list[tuple[Placed, Placed, Rect]]:
        """Pairs of files that cover the same cells, and those cells."""
        by_row = sorted(self.tiles, key=lambda t: t.row)
        pairs = []
        for i, first in enumerate(by_row):
            for second in itertools.takewhile(
                lambda t, end=first.row + first.file.height: t.row < end,  # type: ignore[misc]
                by_row[i + 1 :],
            ):
                common = intersect(first.rect, second.rect)
                if common is not None:
                    pairs.append((first, second, common))
        return pairs


def intersect(a: Rect, b: Rect) -> Rect | None:
    """Common cells of two rectangles, or None."""
    left, top = max(a[0], b[0]), max(a[1], b[1])
    right, bottom = min(a[0] + a[2], b[0] + b[2]), min(a[1] + a[3], b[1] + b[3])
    return (left, top, right - left, bottom - top) if right > left and bottom > top else None


def open_mosaic(key: str, raster: Paths, nodata: float | None) -> Mosaic:
    """Gather the files of one input.

    Parameters
    ----------
    key : str
        Config key, for messages.
    raster : Paths
        Paths and patterns, absolute or remote.
    nodata : float or None
        Nodata value the config declares for the files, besides their own.

    Raises
    ------
    InputError
        Every file that is missing, cannot be opened or does not share the first file's CRS and
        grid. Messages do not carry the config's line; the caller adds it.
    """
    paths, faults = expand(raster.paths)
    files = []
    for path in paths:
        try:
            files.append(read_header(path))
        except InputError as error:
            faults += error.faults
    if faults:
        raise InputError(*faults)
    return _arrange(key, files, nodata)


def _arrange(key: str, files: list[SourceFile], nodata: float | None) -> Mosaic:
    first = files[0]
    offsets, faults = [(0, 0)], list[str]()
    for file in files[1:]:
        try:
            offsets.append(_offset(first, file))
        except InputError as error:
            faults += error.faults
    if faults:
        raise InputError(*faults)
    left, top = min(c for c, _ in offsets), min(r for _, r in offsets)
    tiles = tuple(
        Placed(file, c - left, r - top) for file, (c, r) in zip(files, offsets, strict=True)
    )
    a, b, c0, d, e, f0 = first.transform
    return Mosaic(
        key=key,
        tiles=tiles,
        width=max(t.col + t.file.width for t in tiles),
        height=max(t.row + t.file.height for t in tiles),
        transform=(a, b, c0 + left * a + top * b, d, e, f0 + left * d + top * e),
        crs_wkt=first.crs_wkt,
        nodata=nodata,
        notes=tuple(_notes(files)),
    )


def same_crs(a: str, b: str) -> bool:
    """Whether two CRS texts mean the same coordinates."""
    if a == b:
        return True
    try:
        return bool(CRS.from_wkt(a) == CRS.from_wkt(b))
    except CRSError:
        return False


def cell_offset(
    base: tuple[float, ...], other: tuple[float, ...], width: int, height: int
) -> tuple[float, float, float]:
    """Where `other`'s grid lies on `base`'s, in cells.

    Returns column and row of the first corner, and the largest distance of any corner of the
    `width` x `height` cells from that whole-cell shift (0 for grids that share their lines).
    """
    a, b, c, d, e, f = base
    det = a * e - b * d
    corners = []
    for col, row in ((0, 0), (width, 0), (0, height), (width, height)):
        x = other[0] * col + other[1] * row + other[2] - c
        y = other[3] * col + other[4] * row + other[5] - f
        corners.append(((e * x - b * y) / det - col, (a * y - d * x) / det - row))
    shift_col, shift_row = corners[0]
    whole = (round(shift_col), round(shift_row))
    worst = max(max(abs(u - whole[0]), abs(v - whole[1])) for u, v in corners)
    return shift_col, shift_row, worst


def _offset(first: SourceFile, file: SourceFile) -> tuple[int, int]:
    if not same_crs(first.crs_wkt, file.crs_wkt):
        raise InputError(
            f"{file.path}: its CRS differs from that of {first.path}; tiles of one input must "
            "share one CRS, reproject it first"
        )
    col, row, worst = cell_offset(first.transform, file.transform, file.width, file.height)
    if worst > ALIGNED:
        raise InputError(
            f"{file.path}: lies {worst:.3g} cells off the grid of {first.path}; tiles of one input "
            f"must share one grid within {ALIGNED} cells, resample it first"
        )
    return round(col), round(row)


def _notes(files: list[SourceFile]) -> list[str]:
    notes = []
    for file in files:
        if file.bands > 1:
            notes.append(f"{file.path}: has {file.bands} bands, band 1 is used")
        if (file.scale, file.offset) != (1.0, 0.0):
            notes.append(f"{file.path}: values x {file.scale:g} + {file.offset:g} as it declares")
        if file.point:
            notes.append(f"{file.path}: declares cells as points; taken as cell centres")
    return notes
