"""Catalogue of the layers a run can write: the one place their names and units live.

Writer, statistics, tags and the README's table follow from it; to add a layer, add a row here
and bind its values in `recipe`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

NODATA = -9999.0
"""Nodata of every continuous layer."""

CLASS_NODATA = 0
"""Nodata of the class layer; never a class."""


@dataclass(frozen=True)
class Layer:
    """One output raster.

    `unit` is a UDUNITS string, `meaning` the band description, `cf_name` the CF standard name
    where one exists, `overview` how a coarser cell is made from finer ones.
    """

    name: str
    unit: str
    meaning: str
    dtype: Literal["float32", "uint8", "int16"]
    nodata: float
    overview: Literal["mean", "most frequent"]
    cf_name: str | None = None
    needs: Literal["", "several sets", "seasons", "retention"] = ""
    """What a config must give for the layer to exist; nothing for most."""
    stops: tuple[float, ...] = ()
    """Values at which the colours of `ramp` stand, the same in every run so that maps compare."""
    ramp: tuple[str, ...] = ()

    @property
    def continuous(self) -> bool:
        """Whether cells hold a quantity rather than a class."""
        return self.dtype == "float32"


# ColorBrewer 5-class ramps (Harrower & Brewer 2003, The Cartographic Journal 40(1):27-37): one hue
# ordered by lightness, or two hues for what has a middle; they hold under colour-blindness.
SALT = ("#ffffd4", "#fed98e", "#fe9929", "#d95f0e", "#993404")
WATER = ("#f0f9e8", "#bae4bc", "#7bccc4", "#43a2ca", "#0868ac")
DEPTH = ("#f1eef6", "#bdc9e1", "#74a9cf", "#2b8cbe", "#045a8d")
MARGIN = ("#e66101", "#fdb863", "#f7f7f7", "#b2abd2", "#5e3c99")
TIME = ("#edf8fb", "#b3cde3", "#8c96c6", "#8856a7", "#810f7c")

_LOADS = (0.0, 1.0, 5.0, 15.0, 30.0)


def _quantity(
    name: str,
    unit: str,
    meaning: str,
    stops: tuple[float, ...],
    ramp: tuple[str, ...],
    cf_name: str | None = None,
    needs: Literal["", "several sets", "seasons", "retention"] = "",
) -> Layer:
    return Layer(name, unit, meaning, "float32", NODATA, "mean", cf_name, needs, stops, ramp)


LAYERS: dict[str, Layer] = {
    layer.name: layer
    for layer in (
        _quantity(
            "max_evaporation",
            "mm day-1",
            "maximum steady evaporation the soil can lift",
            (0.0, 0.1, 0.5, 1.0, 3.0),
            WATER,
            "water_evaporation_flux_from_soil",
        ),
        _quantity(
            "evaporation",
            "mm year-1",
            "groundwater evaporation, capped by evaporative demand",
            (0.0, 10.0, 50.0, 200.0, 800.0),
            WATER,
            "water_evaporation_amount",
        ),
        _quantity(
            "salt_load", "t ha-1 year-1", "gross yearly salt rise from groundwater", _LOADS, SALT
        ),
        _quantity(
            "critical_depth",
            "m",
            "critical depth to water table for the target load",
            (0.0, 1.0, 2.0, 3.0, 5.0),
            DEPTH,
        ),
        _quantity(
            "depth_margin",
            "m",
            "depth to water table minus critical depth",
            (-2.0, -0.5, 0.0, 0.5, 2.0),
            MARGIN,
        ),
        Layer(
            "hazard_class",
            "class",
            "salinization hazard class",
            "uint8",
            CLASS_NODATA,
            "most frequent",
        ),
        _quantity(
            "salt_load_lowest_set",
            "t ha-1 year-1",
            "lowest gross yearly salt rise among the soil parameter sets",
            _LOADS,
            SALT,
            needs="several sets",
        ),
        _quantity(
            "salt_load_highest_set",
            "t ha-1 year-1",
            "highest gross yearly salt rise among the soil parameter sets",
            _LOADS,
            SALT,
            needs="several sets",
        ),
        _quantity(
            "net_demand",
            "mm year-1",
            "evaporative demand that rain and irrigation leave",
            (0.0, 200.0, 500.0, 1000.0, 2000.0),
            WATER,
            needs="seasons",
        ),
        _quantity(
            "percolation",
            "mm year-1",
            "rain and irrigation beyond the evaporative demand",
            (0.0, 50.0, 100.0, 200.0, 500.0),
            DEPTH,
            needs="seasons",
        ),
        _quantity(
            "response_time",
            "days",
            "water between hydrostatic and steady profile over maximum evaporation",
            (1.0, 10.0, 30.0, 100.0, 365.0),
            TIME,
            needs="retention",
        ),
    )
}

BASIC = tuple(name for name, layer in LAYERS.items() if not layer.needs)
"""Layers of any run."""

SEVERAL_SETS = tuple(name for name, layer in LAYERS.items() if layer.needs == "several sets")
"""Layers of a run with a list of soil parameter sets."""

SEASONS = tuple(name for name, layer in LAYERS.items() if layer.needs == "seasons")
"""Layers of a run with seasons."""

PER_SEASON = {
    "max_evaporation": "mm day-1",
    "evaporation": "mm",
    "salt_load": "t ha-1",
    "net_demand": "mm",
    "percolation": "mm",
}
"""Layers that a run can write for each season, with their units over the season."""


CHANGES: dict[str, Layer] = {
    layer.name: layer
    for layer in (
        _quantity(
            "salt_load_change",
            "t ha-1 year-1",
            "change of gross yearly salt rise",
            (-15.0, -2.0, 0.0, 2.0, 15.0),
            MARGIN[::-1],
        ),
        _quantity(
            "depth_margin_change",
            "m",
            "change of depth margin",
            (-1.0, -0.2, 0.0, 0.2, 1.0),
            MARGIN,
        ),
        Layer(
            "hazard_class_change",
            "class",
            "change of hazard class; 100 where depths differ within their error",
            "int16",
            -32768,
            "most frequent",
        ),
    )
}
"""Layers of a comparison of two runs, the second minus the first."""


def season_folder(name: str) -> str:
    """Folder of a season's layers: anything but letters and digits becomes "-", at most 60."""
    plain = "".join(letter if letter.isalnum() else "-" for letter in name)
    return f"season-{plain[:60]}"


def season_layer(season: str, layer: str) -> str:
    """Name of a season's layer: its folder and the layer's own name."""
    return f"{season_folder(season)}/{layer}"


def layer_of(name: str) -> Layer:
    """The catalogue's row of a layer, be it of the year or of a season (`season_layer`)."""
    folder, _, base = name.rpartition("/")
    if not folder:
        return LAYERS[base]
    season = folder.removeprefix("season-")
    meaning = LAYERS[base].meaning.replace("yearly ", "")
    return replace(
        LAYERS[base], name=name, unit=PER_SEASON[base], meaning=f"{meaning}, season {season}"
    )


MASK_REASONS = {
    "no_depth": "no depth to water table",
    "no_texture": "no texture",
    "not_soil": "mapped to not soil",
    "no_salinity": "no groundwater salinity",
    "no_potential_evaporation": "no potential evaporation, rain or irrigation",
    "no_root_depth": "no depth of the root zone",
}
"""Why a cell has no answer, by the name of its count."""
