"""Make the tiles of Velith Basin, an invented region: every value here is made up.

    python sample_tiles/make_velith.py [FOLDER]

The region lies over open ocean in UTM zone 40S (about 38 S, 57 E), so that it is nobody's land.
The random state is fixed: the same libraries make the same pixels.
"""

from __future__ import annotations

import sys
from pathlib import Path

import geopandas
import numpy as np
import rasterio
from rasterio.features import rasterize
from rasterio.transform import from_origin
from scipy.ndimage import distance_transform_edt, gaussian_filter, zoom
from shapely.geometry import LineString, Polygon, box
from shapely.ops import polygonize, unary_union

CRS = "EPSG:32740"
WEST, NORTH, CELL = 500_000.0, 5_800_000.0, 50.0
HEIGHT, WIDTH = 1000, 1300
TILES = (2, 2)
NODATA = -9999.0

SAND, LOAMY_SAND, SANDY_LOAM, LOAM, SILT_LOAM, SANDY_CLAY_LOAM = 1, 2, 3, 4, 5, 6
CLAY_LOAM, SILTY_CLAY_LOAM, SANDY_CLAY, SILTY_CLAY, CLAY, TOWN = 7, 8, 9, 10, 11, 20

# Columns and rows (in cells) of the region's features.
RIVER = [
    (60, 130),
    (210, 240),
    (330, 260),
    (470, 380),
    (600, 420),
    (760, 560),
    (900, 600),
    (1040, 730),
    (1120, 780),
]
CANALS = (
    [(300, 258), (460, 200), (700, 230), (930, 330), (1100, 420)],
    [(330, 262), (360, 430), (470, 610), (640, 730), (830, 820)],
)
SINK, SINK_RADIUS = (1130, 800), (120, 75)
POND, POND_RADIUS = (640, 560), (16, 10)
TOWN_BOX = (560, 330, 596, 356)
RIM = [
    (20, 90),
    (140, 30),
    (420, 60),
    (760, 50),
    (1080, 160),
    (1270, 420),
    (1285, 760),
    (1180, 950),
    (860, 975),
    (520, 900),
    (300, 700),
    (130, 430),
]


def noise(random: np.random.Generator, scale: float) -> np.ndarray:
    """Smooth noise of unit spread over `scale` cells."""
    coarse = random.standard_normal((HEIGHT // 8 + 1, WIDTH // 8 + 1))
    smooth = gaussian_filter(coarse, scale / 8)
    return zoom(smooth / smooth.std(), 8, order=1)[:HEIGHT, :WIDTH]


def distance_to(line: list[tuple[float, float]]) -> np.ndarray:
    """Distance of each cell from a line [cells]."""
    mask = np.ones((HEIGHT, WIDTH), dtype=bool)
    path = LineString(line)
    for along in np.arange(0, path.length, 0.5):
        col, row = path.interpolate(along).coords[0]
        mask[min(int(row), HEIGHT - 1), min(int(col), WIDTH - 1)] = False
    return distance_transform_edt(mask)


def ellipse(centre: tuple[float, float], radius: tuple[float, float]) -> np.ndarray:
    """Relative distance from an ellipse's centre: 1 on its rim."""
    rows, cols = np.mgrid[:HEIGHT, :WIDTH]
    return np.hypot((cols - centre[0]) / radius[0], (rows - centre[1]) / radius[1])


def meander(line: list[tuple[float, float]], sway: float) -> list[tuple[float, float]]:
    """A smoothly winding line through the given points."""
    path = LineString(line)
    along = np.linspace(0, path.length, 600)
    points = np.array([path.interpolate(a).coords[0] for a in along])
    points = gaussian_filter(points, (14, 0), mode="nearest")
    normal = np.gradient(points, axis=0)[:, ::-1] * (1, -1)
    normal /= np.linalg.norm(normal, axis=1, keepdims=True)
    swing = sway * np.sin(along / 26.0) * np.sin(along / 71.0 + 1.0)
    return [tuple(p) for p in points + normal * swing[:, None]]


def inside_rim() -> np.ndarray:
    """Cells of the basin."""

    path = Polygon(RIM).exterior
    points = [path.interpolate(a, normalized=True).coords[0] for a in np.arange(0, 1, 1 / 500)]
    rim = Polygon(gaussian_filter(np.array(points), (16, 0), mode="wrap"))
    return rasterize([rim], (HEIGHT, WIDTH), fill=0, default_value=1).astype(bool)


def water_table(random: np.random.Generator) -> np.ndarray:
    """Depth to the water table [m]: deep uplands, mounds under leaking canals, a shallow sink."""
    river, sink = distance_to(meander(RIVER, 14)), ellipse(SINK, SINK_RADIUS)
    rows, cols = np.mgrid[:HEIGHT, :WIDTH]
    downstream = np.clip((cols * 0.82 + rows * 0.57) / 1350.0, 0, 1)
    upland = 6.4 - 3.9 * downstream
    depth = upland * (0.45 + 0.55 * (1 - np.exp(-river / 130.0)))
    for canal in CANALS:
        near = distance_to(meander(canal, 3))
        depth -= 1.5 * np.exp(-near / 26.0) * np.clip(1.15 - 0.6 * downstream, 0.3, 1)
    depth -= 1.6 * np.exp(-np.clip(sink - 0.2, 0, None) * 1.1)
    depth += 0.42 * noise(random, 60) + 0.12 * noise(random, 16)
    depth = np.maximum(depth, 0.25 + 0.1 * noise(random, 30))
    depth = np.where(river < 1.5, 0.3, depth)
    pond = ellipse(POND, POND_RADIUS)
    depth = np.where(pond < 1, -0.9 * (1 - pond**2), depth)
    depth = np.where(sink < 0.16, -0.05, depth)
    return np.round(depth, 2)


def texture(random: np.random.Generator) -> np.ndarray:
    """USDA classes by code: a coarse fan upstream, levees, clays towards the sink."""
    rows, cols = np.mgrid[:HEIGHT, :WIDTH]
    fan = np.hypot(cols - 60, (rows - 130) * 1.2) / 1000.0
    river = distance_to(meander(RIVER, 14))
    fineness = 1.05 * fan + 0.11 * noise(random, 70) + 0.05 * noise(random, 20)
    fineness -= 0.14 * np.exp(-river / 18.0)
    edges = [0.16, 0.28, 0.46, 0.60, 0.72, 0.80, 0.92, 1.02, 1.10, 1.20]
    order = [
        SAND,
        LOAMY_SAND,
        SANDY_LOAM,
        LOAM,
        SILT_LOAM,
        SANDY_CLAY_LOAM,
        CLAY_LOAM,
        SILTY_CLAY_LOAM,
        SANDY_CLAY,
        SILTY_CLAY,
        CLAY,
    ]
    codes = np.array(order, dtype=np.uint8)[np.searchsorted(edges, fineness)]
    left, top, right, bottom = TOWN_BOX
    codes[top:bottom, left:right] = TOWN
    return codes


def conductivity(random: np.random.Generator) -> np.ndarray:
    """Groundwater EC [dS/m]: fresh beside river and canals, brine in the sink."""
    river, sink = distance_to(RIVER), ellipse(SINK, SINK_RADIUS)
    rows, cols = np.mgrid[:HEIGHT, :WIDTH]
    downstream = np.clip((cols * 0.82 + rows * 0.57) / 1350.0, 0, 1)
    salt = np.log(0.9) + 2.1 * downstream + 0.7 * (1 - np.exp(-river / 160.0))
    salt += 1.3 * np.exp(-np.clip(sink - 0.3, 0, None) * 1.3) + 0.28 * noise(random, 80)
    for canal in CANALS:
        salt -= 0.55 * np.exp(-distance_to(canal) / 40.0)
    return np.clip(np.round(np.exp(salt), 1), 0.4, 45.0)


def districts() -> geopandas.GeoDataFrame:
    """Twelve invented districts that share their boundaries, one of them over the rim."""
    frame = box(180, 120, 1300, 960)
    cuts = [
        LineString([(180, 420), (420, 400), (800, 470), (1300, 520)]),
        LineString([(180, 640), (520, 650), (900, 700), (1300, 690)]),
        LineString([(430, 120), (470, 400), (440, 960)]),
        LineString([(690, 120), (720, 460), (700, 960)]),
        LineString([(960, 120), (940, 480), (990, 960)]),
    ]
    parts = polygonize(unary_union([frame.exterior, *cuts]))
    parts = sorted(parts, key=lambda p: (round(p.centroid.y / 200), p.centroid.x))
    names = [
        "Upper Fan",
        "Korrin",
        "Selden Flats",
        "North Weir",
        "West Bank",
        "Marl Cross",
        "Odrey",
        "Long Reach",
        "Thistle End",
        "Low Meadows",
        "Brackwater",
        "Saltmouth",
    ]
    weir = box(600, 250, 603, 252)
    parts = [p.difference(weir) for p in parts] + [weir]
    names = [*names, "Weir Yard"]
    a, d = CELL, -CELL
    shapes = [
        Polygon(
            [(WEST + a * x, NORTH + d * y) for x, y in part.exterior.coords],
            [[(WEST + a * x, NORTH + d * y) for x, y in hole.coords] for hole in part.interiors],
        )
        for part in parts
    ]
    codes = [f"V{k:02d}" for k in range(1, len(shapes) + 1)]
    return geopandas.GeoDataFrame({"code": codes, "name": names}, geometry=shapes, crs=CRS)


def write_tiles(folder: Path, name: str, values: np.ndarray, cell: float, nodata: float) -> None:
    """Cut a layer into `TILES` GeoTIFFs."""
    rows = np.linspace(0, values.shape[0], TILES[0] + 1).astype(int)
    cols = np.linspace(0, values.shape[1], TILES[1] + 1).astype(int)
    predictor = 3 if values.dtype == np.float32 else 2
    for i in range(TILES[0]):
        for j in range(TILES[1]):
            part = values[rows[i] : rows[i + 1], cols[j] : cols[j + 1]]
            transform = from_origin(WEST + cols[j] * cell, NORTH - rows[i] * cell, cell, cell)
            with rasterio.open(
                folder / f"{name}_{i}{j}.tif",
                "w",
                driver="GTiff",
                width=part.shape[1],
                height=part.shape[0],
                count=1,
                dtype=part.dtype,
                crs=CRS,
                transform=transform,
                nodata=nodata,
                tiled=True,
                blockxsize=256,
                blockysize=256,
                compress="deflate",
                predictor=predictor,
                zlevel=9,
            ) as dataset:
                dataset.write(part, 1)


def main(folder: Path) -> None:
    """Write every layer and the districts."""
    random = np.random.default_rng(20260401)
    basin = inside_rim()
    depth = np.where(basin, water_table(random), NODATA)
    codes = np.where(basin, texture(random), 0).astype(np.uint8)
    # Salinity comes at four times coarser cells, as it mostly does.
    salt = conductivity(random)[2::4, 2::4]
    write_tiles(folder, "water_table_depth", depth.astype(np.float32), CELL, NODATA)
    write_tiles(folder, "texture", codes, CELL, 0)
    write_tiles(folder, "groundwater_ec", salt.astype(np.float32), 4 * CELL, NODATA)
    districts().to_file(folder / "districts.gpkg", layer="districts", driver="GPKG")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
