"""Rasters as coloured pictures, and what a map needs beside them: outlines, scale, north."""

from __future__ import annotations

import io
import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import shapely
from numpy.typing import NDArray
from shapely.geometry.base import BaseGeometry

from saltrise.layers import Layer
from saltrise.schemes import Scheme

Rgba = NDArray[np.uint8]

_MOST_NAMES = 40
"""Zones up to which a map shows their names."""

NODATA_GREY = (225, 225, 225, 255)


@dataclass(frozen=True)
class Sheet:
    """A reduced picture of the grid and how it lies on the ground.

    `width` and `height` in picture pixels, `cells` grid cells in one of them; `metres_x` and
    `metres_y` the size of a pixel on the ground; `north` the direction of north in the picture
    (x right, y down).
    """

    width: int
    height: int
    cells: float
    metres_x: float
    metres_y: float
    north: tuple[float, float]

    @property
    def stretch(self) -> float:
        """Height of a pixel over its width, on the ground."""
        return self.metres_y / self.metres_x

    def scale_bar(self) -> tuple[float, float]:
        """A round length [m], about a quarter of the width, and its pixels."""
        quarter = self.width * self.metres_x / 4
        power = 10.0 ** math.floor(math.log10(quarter))
        length = max(step * power for step in (1, 2, 5) if step * power <= quarter)
        return length, length / self.metres_x


def colours_of(values: np.ma.MaskedArray, layer: Layer, scheme: Scheme) -> Rgba:
    """A layer's cells as red, green, blue, opacity; nodata in grey."""
    picture = np.empty((*values.shape, 4), dtype=np.uint8)
    picture[:] = NODATA_GREY
    there = ~np.ma.getmaskarray(values)
    if layer.continuous:
        ramp = np.array([_rgb(colour) for colour in layer.ramp], dtype=np.float64)
        found = values.data[there].astype(np.float64)
        for band in range(3):
            picture[there, band] = np.rint(np.interp(found, layer.stops, ramp[:, band]))
    else:
        table = np.zeros((256, 3), dtype=np.uint8)
        for number, colour in scheme.rgb().items():
            table[number] = colour
        picture[there, :3] = table[values.data[there]]
    return picture


def _rgb(colour: str) -> tuple[int, int, int]:
    return int(colour[1:3], 16), int(colour[3:5], 16), int(colour[5:7], 16)


def png(picture: Rgba) -> bytes:
    """A picture as PNG."""
    from matplotlib.image import imsave

    buffer = io.BytesIO()
    imsave(buffer, picture, format="png", metadata={"Software": "saltrise"})
    return buffer.getvalue()


def svg_path(shape: BaseGeometry, sheet: Sheet) -> str:
    """A polygon in cell coordinates as the `d` of an SVG path in picture pixels."""
    scaled = shapely.transform(shape, lambda points: points / sheet.cells)
    thin = shapely.simplify(scaled, 0.6)
    if thin.is_empty:
        thin = scaled
    parts = []
    for polygon in shapely.get_parts(thin):
        if polygon.geom_type != "Polygon":
            continue
        for ring in (polygon.exterior, *polygon.interiors):
            points = shapely.get_coordinates(ring)[:-1]
            parts.append("M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in points) + "Z")
    return "".join(parts)


def length_text(metres: float) -> str:
    """A length as people write it."""
    return f"{metres / 1000:g} km" if metres >= 1000 else f"{metres:g} m"


def drawable(text: str, id_: str) -> str:
    """A name as a picture can show it (Latin, Cyrillic, Greek, Arabic), or else the id."""
    ranges = ((0x20, 0x24F), (0x370, 0x52F), (0x600, 0x6FF), (0x1E00, 0x1FFF), (0x2000, 0x206F))
    known = all(any(low <= ord(c) <= high for low, high in ranges) for c in text)
    return text if known and text.strip() else id_


def map_png(
    picture: Rgba,
    layer: Layer,
    scheme: Scheme,
    sheet: Sheet,
    outlines: Sequence[BaseGeometry],
    names: Sequence[str],
    title: str,
    caption: str,
) -> bytes:
    """A layer as a map for a slide: outlines, legend, scale bar, north; 200 dots an inch.

    Parameters
    ----------
    picture : uint8 array (rows, columns, 4)
        From `colours_of`.
    layer, scheme, sheet
        What it shows and how it lies.
    outlines : sequence of polygons
        Zones in cell coordinates.
    names : sequence of str
        Of the zones, written inside them while there are few.
    title, caption : str
        Above and below the map.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.collections import LineCollection
    from matplotlib.figure import Figure

    figure = Figure(figsize=(10, 7.5), dpi=200)
    FigureCanvasAgg(figure)
    axes = figure.add_axes((0.02, 0.05, 0.72, 0.88), anchor="NW")
    axes.imshow(
        picture,
        extent=(0, sheet.width, sheet.height, 0),
        interpolation="nearest",
        aspect=sheet.stretch,
    )
    lines = [
        shapely.get_coordinates(ring) / sheet.cells
        for shape in outlines
        for polygon in shapely.get_parts(shape)
        if polygon.geom_type == "Polygon"
        for ring in (polygon.exterior, *polygon.interiors)
    ]
    axes.add_collection(LineCollection(lines, colors="#222222", linewidths=0.6))
    if len(names) <= _MOST_NAMES:
        for shape, name in zip(outlines, names, strict=True):
            _name(axes, shape, name, sheet)
    axes.set_xlim(0, sheet.width)
    axes.set_ylim(sheet.height, 0)
    axes.set_axis_off()
    axes.set_title(_plain(title), fontsize=13, loc="left")
    _legend(axes, layer, scheme)
    _scale_and_north(axes, sheet)
    figure.text(0.01, 0.005, _plain(caption), fontsize=7, color="#444444")
    buffer = io.BytesIO()
    quick = {"compress_level": 3}
    figure.savefig(buffer, format="png", metadata={"Software": "saltrise"}, pil_kwargs=quick)
    return buffer.getvalue()


def _name(axes: object, shape: BaseGeometry, name: str, sheet: Sheet) -> None:
    from matplotlib.axes import Axes
    from matplotlib.patheffects import withStroke

    assert isinstance(axes, Axes)
    at = shape.representative_point()
    if shape.area < (0.03 * sheet.width * sheet.cells) ** 2:
        return  # a zone too small for its name
    axes.text(
        at.x / sheet.cells,
        at.y / sheet.cells,
        _plain(name)[:28],
        fontsize=7,
        ha="center",
        va="center",
        clip_on=True,
        path_effects=[withStroke(linewidth=2, foreground="white")],
    )


def _plain(text: str) -> str:
    """A text without what matplotlib would set as a formula, on one line."""
    return "".join(c if c >= " " else " " for c in text).replace("$", r"\$")[:160]


def _legend(axes: object, layer: Layer, scheme: Scheme) -> None:
    from matplotlib.axes import Axes
    from matplotlib.patches import Patch

    from saltrise.report.styles import plain_unit

    assert isinstance(axes, Axes)
    if layer.continuous:
        pairs = list(zip(layer.ramp, (f"{stop:g}" for stop in layer.stops), strict=True))
        title = plain_unit(layer.unit)
    else:
        labels = [f"{k}  {text}" for k, text in enumerate(scheme.labels(), start=1)]
        pairs, title = list(zip(scheme.colours, labels, strict=True)), "class"
    handles = [Patch(facecolor=c, edgecolor="#555555", label=_plain(t)) for c, t in pairs]
    handles.append(Patch(facecolor="#e1e1e1", edgecolor="#555555", label="no answer"))
    axes.legend(
        handles=handles, title=title, loc="upper left", bbox_to_anchor=(1.01, 1.0), fontsize=8
    )


def _scale_and_north(axes: object, sheet: Sheet) -> None:
    from matplotlib.axes import Axes

    assert isinstance(axes, Axes)
    length, pixels = sheet.scale_bar()
    x, y = 0.03 * sheet.width, 0.97 * sheet.height
    axes.plot([x, x + pixels], [y, y], color="black", linewidth=3, solid_capstyle="butt")
    axes.text(x, y - 0.015 * sheet.height, length_text(length), fontsize=8)
    tip = 0.06 * sheet.height
    dx, dy = sheet.north[0] * tip, sheet.north[1] * tip
    at = (0.95 * sheet.width, 0.1 * sheet.height)
    axes.annotate(
        "N",
        xy=(at[0] + dx, at[1] + dy),
        xytext=at,
        arrowprops={"arrowstyle": "-|>", "color": "black"},
        ha="center",
        va="center",
        fontsize=9,
    )
