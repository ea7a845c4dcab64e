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
    dtype: Literal["float32", "uint8"]
    nodata: float
    overview: Literal["mean", "most frequent"]
    cf_name: str | None = None
    needs: Literal["", "several sets", "seasons", "retention"] = ""
    """What a config must give for the layer to exist; nothing for most."""

    @property
    def continuous(self) -> bool:
        """Whether cells hold a quantity rather than a class."""
        return self.dtype == "float32"


def _quantity(name: str, unit: str, meaning: str, cf_name: str | None = None) -> Layer:
    return Layer(name, unit, meaning, "float32", NODATA, "mean", cf_name)


LAYERS: dict[str, Layer] = {
    layer.name: layer
    for layer in (
        _quantity(
            "max_evaporation",
            "mm day-1",
            "maximum steady evaporation the soil can lift",
            "water_evaporation_flux_from_soil",
        ),
        _quantity(
            "evaporation",
            "mm year-1",
            "groundwater evaporation, capped by evaporative demand",
            "water_evaporation_amount",
        ),
        _quantity("salt_load", "t ha-1 year-1", "gross yearly salt rise from groundwater"),
        _quantity("critical_depth", "m", "critical depth to water table for the target load"),
        _quantity("depth_margin", "m", "depth to water table minus critical depth"),
        Layer(
            "hazard_class",
            "class",
            "salinization hazard class",
            "uint8",
            CLASS_NODATA,
            "most frequent",
        ),
        Layer(
            "salt_load_lowest_set",
            "t ha-1 year-1",
            "lowest gross yearly salt rise among the soil parameter sets",
            "float32",
            NODATA,
            "mean",
            needs="several sets",
        ),
        Layer(
            "salt_load_highest_set",
            "t ha-1 year-1",
            "highest gross yearly salt rise among the soil parameter sets",
            "float32",
            NODATA,
            "mean",
            needs="several sets",
        ),
        Layer(
            "net_demand",
            "mm year-1",
            "evaporative demand that rain and irrigation leave",
            "float32",
            NODATA,
            "mean",
            needs="seasons",
        ),
        Layer(
            "percolation",
            "mm year-1",
            "rain and irrigation beyond the evaporative demand",
            "float32",
            NODATA,
            "mean",
            needs="seasons",
        ),
        Layer(
            "response_time",
            "days",
            "water between hydrostatic and steady profile over maximum evaporation",
            "float32",
            NODATA,
            "mean",
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
