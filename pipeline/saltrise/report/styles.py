"""How a GIS draws a layer: OGC styles and the attribute table of the class raster."""

from __future__ import annotations

import math
from collections.abc import Sequence
from xml.sax.saxutils import escape, quoteattr

from saltrise.layers import Layer
from saltrise.schemes import Scheme

_HEAD = (
    '<?xml version="1.0" encoding="UTF-8"?>\n'
    '<StyledLayerDescriptor version="1.0.0" xmlns="http://www.opengis.net/sld" '
    'xmlns:ogc="http://www.opengis.net/ogc" xmlns:xlink="http://www.w3.org/1999/xlink" '
    'xmlns:xsi="http://www.w3.org/2001/XMLSchema-instance" '
    'xsi:schemaLocation="http://www.opengis.net/sld '
    'http://schemas.opengis.net/sld/1.0.0/StyledLayerDescriptor.xsd">\n'
)


def plain_unit(unit: str) -> str:
    """A UDUNITS string as people write it: "t ha-1 year-1" is t/ha/year."""
    return "/".join(part.removesuffix("-1") for part in unit.split())


def sld(layer: Layer, scheme: Scheme, title: str) -> str:
    """OGC Styled Layer Descriptor 1.0.0 of a layer.

    Parameters
    ----------
    layer : Layer
        The layer; a class raster takes names and colours from the scheme, others their own ramp.
    scheme : Scheme
        The run's class scheme.
    title : str
        The region's title.
    """
    if layer.continuous:
        kind, about = "ramp", f"{layer.meaning} [{plain_unit(layer.unit)}]"
        entries = [
            (value, colour, f"{value:g} {plain_unit(layer.unit)}")
            for value, colour in zip(layer.stops, layer.ramp, strict=True)
        ]
    else:
        kind, about = "values", f"{scheme.title}. {scheme.citation}"
        entries = [
            (float(k), colour, label)
            for k, (colour, label) in enumerate(
                zip(scheme.colours, scheme.labels(), strict=True), start=1
            )
        ]
    lines = "\n".join(
        f'            <ColorMapEntry color="{colour}" quantity="{value:g}" '
        f'label={quoteattr(label)} opacity="1"/>'
        for value, colour, label in entries
    )
    return (
        f"{_HEAD}  <NamedLayer>\n    <Name>{escape(layer.name)}</Name>\n    <UserStyle>\n"
        f"      <Name>{escape(layer.name)}</Name>\n"
        f"      <Title>{escape(_line(title))}: {escape(layer.meaning)}</Title>\n"
        f"      <Abstract>{escape(about)}</Abstract>\n      <FeatureTypeStyle>\n        <Rule>\n"
        f'          <RasterSymbolizer>\n          <ColorMap type="{kind}">\n{lines}\n'
        "          </ColorMap>\n          </RasterSymbolizer>\n        </Rule>\n"
        "      </FeatureTypeStyle>\n    </UserStyle>\n  </NamedLayer>\n</StyledLayerDescriptor>\n"
    )


def _line(text: str) -> str:
    """A text on one line, without characters that XML cannot hold."""
    return "".join(c if c >= " " else " " for c in text)


# Kinds and uses of columns as GDAL numbers them.
_INTEGER, _REAL, _STRING = 0, 1, 2
_GENERIC, _NAME, _LEAST, _GREATEST, _MIN_MAX, _RED, _GREEN, _BLUE = 0, 2, 3, 4, 5, 6, 7, 8


def attribute_table(scheme: Scheme, areas_ha: Sequence[float]) -> str:
    """Raster attribute table of the class raster, as GDAL reads it from `.tif.aux.xml`.

    Parameters
    ----------
    scheme : Scheme
        The run's class scheme.
    areas_ha : sequence of float
        True area of classes 1 to 6 [ha].
    """
    columns = [
        ("value", _INTEGER, _MIN_MAX),
        ("class", _STRING, _NAME),
        ("lower", _REAL, _GENERIC),
        ("upper", _REAL, _GENERIC),
        ("unit", _STRING, _GENERIC),
        ("red", _INTEGER, _RED),
        ("green", _INTEGER, _GREEN),
        ("blue", _INTEGER, _BLUE),
        ("area_ha", _REAL, _GENERIC),
    ]
    bounds = [*scheme.bounds(), (math.nan, math.nan)]
    lines = [
        f'      <FieldDefn index="{k}"><Name>{name}</Name><Type>{kind}</Type>'
        f"<Usage>{use}</Usage></FieldDefn>"
        for k, (name, kind, use) in enumerate(columns)
    ]
    for k, name in enumerate(scheme.names, start=1):
        low, high = bounds[k - 1]
        unit = plain_unit(scheme.unit) if k <= len(scheme.bounds()) else ""
        cells = (k, name, *map(_number, (low, high)), unit, *scheme.rgb()[k], areas_ha[k - 1])
        inside = "".join(f"<F>{escape(str(cell))}</F>" for cell in cells)
        lines.append(f'      <Row index="{k - 1}">{inside}</Row>')
    body = "\n".join(lines)
    return (
        '<PAMDataset>\n  <PAMRasterBand band="1">\n'
        f'    <GDALRasterAttributeTable tableType="thematic">\n{body}\n'
        "    </GDALRasterAttributeTable>\n  </PAMRasterBand>\n</PAMDataset>\n"
    )


def _number(value: float) -> str:
    """A bound as GDAL reads it; open ends are empty, which it takes for 0."""
    return "" if math.isnan(value) or math.isinf(value) else repr(value)
