"""Read two runs' layers side by side and write what changed, strip by strip."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import ExitStack
from pathlib import Path

import numpy as np
import rasterio
from numpy.typing import NDArray
from rasterio.errors import RasterioError
from rasterio.windows import Window as RasterWindow

from saltrise.errors import InputError, RunError
from saltrise.grid import Grid, Window
from saltrise.io import durable
from saltrise.io.cog import write_cog
from saltrise.layers import Layer

Strip = Mapping[str, NDArray[np.generic]]


class Layers:
    """Layers of a finished run, open for reading by windows; use it as a context."""

    def __init__(self, folder: Path, names: tuple[str, ...]) -> None:
        self._folder, self._names, self._stack = folder, names, ExitStack()

    def __enter__(self) -> Layers:
        """Open the files.

        Raises
        ------
        InputError
            A layer is missing or unreadable.
        """
        self._open = {}
        for name in self._names:
            path = self._folder / "layers" / f"{name}.tif"
            try:
                self._open[name] = self._stack.enter_context(rasterio.open(path))
            except RasterioError as error:
                self._stack.close()
                raise InputError(
                    f"{path}: cannot be read; a comparison needs the layers "
                    f"{', '.join(self._names)} of both runs ({error})"
                ) from error
        return self

    def __exit__(self, *_: object) -> None:
        """Close the files."""
        self._stack.close()

    def read(self, window: Window) -> dict[str, NDArray[np.float64]]:
        """Values of all layers, NaN for nodata."""
        place = RasterWindow(window.col, window.row, window.width, window.height)
        found = {}
        for name, dataset in self._open.items():
            values = dataset.read(1, window=place).astype(np.float64)
            if dataset.nodata is not None:
                values[values == dataset.nodata] = np.nan
            found[name] = values
        return found


def write_changes(
    folder: Path,
    grid: Grid,
    layers: Mapping[str, Layer],
    strips: Iterator[tuple[Window, Strip]],
    tags: Mapping[str, str],
) -> None:
    """Write layers of changes as Cloud-Optimized GeoTIFFs.

    Parameters
    ----------
    folder : Path
        Where they go.
    grid : Grid
        Both runs' grid.
    layers : mapping of Layer
        Layers by name.
    strips : iterator of (Window, mapping of arrays)
        Values of each layer, nodata filled in, window by window.
    tags : mapping of str
        Dataset tags.

    Raises
    ------
    RunError
        A file cannot be written.
    """
    folder.mkdir(parents=True, exist_ok=True)
    profile = {
        "driver": "GTiff",
        "width": grid.width,
        "height": grid.height,
        "count": 1,
        "crs": grid.crs_wkt,
        "transform": rasterio.Affine(*grid.transform),
        "tiled": True,
        "blockxsize": 512,
        "blockysize": 512,
        "compress": "zstd",
        "bigtiff": "if_safer",
    }
    rough = {name: folder / f"{name}.rough.tif" for name in layers}
    try:
        with ExitStack() as stack:
            targets = {}
            for name, layer in layers.items():
                target = stack.enter_context(
                    rasterio.open(
                        rough[name], "w", **profile, dtype=layer.dtype, nodata=layer.nodata
                    )
                )
                target.update_tags(**tags)
                target.update_tags(1, long_name=layer.meaning)
                target.set_band_description(1, layer.meaning)
                target.units = (layer.unit,)
                targets[name] = target
            for window, values in strips:
                place = RasterWindow(window.col, window.row, window.width, window.height)
                for name, target in targets.items():
                    target.write(values[name], 1, window=place)
        for name, layer in layers.items():
            write_cog(folder / f"{name}.tif", str(rough[name]), layer, "zstd", 1)
    except OSError as error:
        raise RunError(durable.explain(folder, error)) from error
    except RasterioError as error:
        raise RunError(f"{folder}: cannot be written: {error}") from error
    finally:
        for path in rough.values():
            path.unlink(missing_ok=True)
