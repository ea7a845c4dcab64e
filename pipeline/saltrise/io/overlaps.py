"""Tiles of one input that cover the same cells: do they agree?"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import rasterio
from rasterio.windows import Window as RasterWindow

from saltrise.io.mosaic import Mosaic, Placed
from saltrise.io.vrt import Rect

_ROWS = 1024


def disagreements(mosaic: Mosaic) -> list[str]:
    """One sentence for each pair of overlapping files whose values differ.

    Values within float32's resolution of each other agree. Cells where one file has nodata do
    not count: the other file fills them.

    Raises
    ------
    rasterio.errors.RasterioError
        A file breaks while it is read.
    """
    sentences = []
    for first, second, rect in mosaic.overlaps():
        # Tiles keep the order in which they were named; the first named wins.
        winner, loser = sorted((first, second), key=mosaic.tiles.index)
        count, worst, where = _compare(mosaic, winner, loser, rect)
        if count:
            sentences.append(
                f"{mosaic.key}: {winner.file.path} and {loser.file.path} overlap in "
                f"{rect[2] * rect[3]} cells and differ in {count} of them (by up to {worst:.6g}, "
                f"first at column {where[0]}, row {where[1]} of the input's grid); "
                f"the values of {winner.file.path} are used"
            )
    return sentences


def _compare(
    mosaic: Mosaic, winner: Placed, loser: Placed, rect: Rect
) -> tuple[int, float, tuple[int, int]]:
    col, row, width, height = rect
    count, worst, where = 0, 0.0, (0, 0)
    views = [
        replace(mosaic, tiles=(tile,)).vrt_on(width, height, mosaic.transform, col, row)
        for tile in (winner, loser)
    ]
    with rasterio.open(views[0]) as one, rasterio.open(views[1]) as two:
        for top in range(0, height, _ROWS):
            window = RasterWindow(0, top, width, min(_ROWS, height - top))
            a = one.read(1, window=window).astype(np.float64)
            b = two.read(1, window=window).astype(np.float64)
            with np.errstate(invalid="ignore"):
                gap = np.abs(a - b)
                differs = gap > 1e-6 * np.maximum(np.abs(a), np.abs(b))
            if differs.any():
                if count == 0:
                    y, x = divmod(int(np.argmax(differs)), width)
                    where = (col + x, row + top + y)
                count += int(differs.sum())
                worst = max(worst, float(gap[differs].max()))
    return count, worst, where
