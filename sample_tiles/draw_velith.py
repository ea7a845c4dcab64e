"""Draw the README's picture from a finished demo run (needs matplotlib).

saltrise run config/velith.toml
python sample_tiles/draw_velith.py out/velith
"""

from __future__ import annotations

import sys
from pathlib import Path

import geopandas
import matplotlib as mpl
import matplotlib.pyplot as plt
import numpy as np
import rasterio
from matplotlib.colors import BoundaryNorm, ListedColormap
from matplotlib.patches import Patch
from rasterio.merge import merge

HERE = Path(__file__).parent
CLASSES = ["very low", "low", "moderate", "high", "very high", "water at surface"]
COLOURS = ["#ffffd4", "#fed98e", "#fe9929", "#d95f0e", "#993404", "#2c7fb8"]
TEXTURES = {
    1: "sand",
    2: "loamy sand",
    3: "sandy loam",
    4: "loam",
    5: "silt loam",
    6: "sandy clay loam",
    7: "clay loam",
    8: "silty clay loam",
    9: "sandy clay",
    10: "silty clay",
    11: "clay",
    20: "town (not soil)",
}


def tiles(name: str) -> np.ma.MaskedArray:
    """One input layer, all tiles."""
    opened = [rasterio.open(path) for path in sorted(HERE.glob(f"{name}_*.tif"))]
    values, _ = merge(opened, masked=True)
    return values[0]


def read(run: Path, name: str) -> np.ma.MaskedArray:
    """One layer of a run."""
    with rasterio.open(run / "layers" / f"{name}.tif") as dataset:
        return dataset.read(1, masked=True)


def main(run: Path) -> None:
    """Draw four maps and save them beside this script."""
    zones = geopandas.read_file(run / "zones.gpkg", layer="zones")
    with rasterio.open(run / "layers" / "salt_load.tif") as dataset:
        left, bottom, right, top = dataset.bounds
    mpl.rcParams.update({"font.size": 8, "axes.titlesize": 9})
    figure, axes = plt.subplots(2, 2, figsize=(10, 6.6), layout="constrained")
    extent = (left / 1e3, right / 1e3, bottom / 1e3, top / 1e3)
    place = {"extent": extent, "interpolation": "nearest"}

    shown = axes[0, 0].imshow(tiles("water_table_depth"), cmap="Blues_r", vmin=0, vmax=6, **place)
    figure.colorbar(shown, ax=axes[0, 0], label="m below ground", shrink=0.75)
    axes[0, 0].set_title("Input: depth to water table")

    codes = tiles("texture")
    palette = [plt.get_cmap("cividis")(0.95 - 0.08 * k) for k in range(11)] + ["#808080"]
    order = np.ma.array(np.searchsorted(list(TEXTURES), codes.filled(1)), mask=codes.mask)
    axes[0, 1].imshow(order, cmap=ListedColormap(palette), vmin=-0.5, vmax=11.5, **place)
    patches = [Patch(color=c, label=t) for c, t in zip(palette, TEXTURES.values(), strict=True)]
    axes[0, 1].legend(handles=patches, loc="center left", bbox_to_anchor=(1, 0.5), frameon=False)
    axes[0, 1].set_title("Input: soil texture")

    edges = [0, 0.1, 0.3, 1, 3, 10, 30, 100, 300]
    shown = axes[1, 0].imshow(
        read(run, "salt_load"), cmap="YlOrBr", norm=BoundaryNorm(edges, 256), **place
    )
    figure.colorbar(shown, ax=axes[1, 0], label="t ha$^{-1}$ year$^{-1}$", shrink=0.75)
    axes[1, 0].set_title("Result: gross yearly salt load from groundwater")

    axes[1, 1].imshow(
        read(run, "hazard_class"), cmap=ListedColormap(COLOURS), vmin=0.5, vmax=6.5, **place
    )
    patches = [
        Patch(facecolor=c, edgecolor="0.5", label=f"{k} {name}")
        for k, (c, name) in enumerate(zip(COLOURS, CLASSES, strict=True), start=1)
    ]
    axes[1, 1].legend(handles=patches, loc="center left", bbox_to_anchor=(1, 0.5), frameon=False)
    axes[1, 1].set_title("Result: hazard class, districts with their rank")

    for axis in axes[1]:
        zones.scale(1e-3, 1e-3, origin=(0, 0)).boundary.plot(ax=axis, color="0.25", linewidth=0.7)
    for row in zones.itertuples():
        label = "not ranked" if np.isnan(row.rank or np.nan) else f"{row.rank:.0f}"
        spot = row.geometry.representative_point()
        axes[1, 1].annotate(
            label,
            (spot.x / 1e3, spot.y / 1e3),
            ha="center",
            fontsize=8,
            bbox={"boxstyle": "round,pad=0.15", "fc": "white", "ec": "none", "alpha": 0.8},
        )
    for axis in axes.ravel():
        axis.set(
            xlim=extent[:2], ylim=extent[2:], aspect="equal", xlabel="km east", ylabel="km north"
        )
    figure.suptitle("Velith Basin (invented region, every value made up)")
    figure.savefig(HERE / "velith_result.png", dpi=110)


if __name__ == "__main__":
    main(Path(sys.argv[1]))
