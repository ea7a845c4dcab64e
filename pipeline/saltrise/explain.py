"""One cell's whole calculation, as a specialist would check it by hand."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from saltrise.engine.account import parameters
from saltrise.engine.config import read_settings
from saltrise.engine.inputs import key_of
from saltrise.engine.region import Opened, Region, make_recipe, open_region
from saltrise.engine.soils import Occurring, occurring, profile_of
from saltrise.engine.survey import BlockScan, Sighting
from saltrise.errors import InputError
from saltrise.io.align import BlockReader
from saltrise.io.regrid import crs_text, point_in
from saltrise.layers import BASIC
from saltrise.physics.column import Column
from saltrise.physics.curve import SURFACE_DEPTH_M
from saltrise.physics.fraction_soils import profile_of_fractions
from saltrise.physics.laws import closed_form_evaporation, gardner_limiting_rate
from saltrise.physics.profile import Campbell, GardnerPower, Profile
from saltrise.physics.regressions import METHODS
from saltrise.physics.soils import NOT_SOIL, TEXTURES, soil_for
from saltrise.physics.stacks import stack_key
from saltrise.physics.texture import fractions_in_percent
from saltrise.recipe import CellResult, Recipe, compute_cells, converted
from saltrise.settings import Settings
from saltrise.stored import single

Answer = dict[str, Any]
Array = NDArray[np.float64]


class Explainer:
    """A region opened once, to explain as many of its cells as asked.

    A class because opening costs more than a cell.
    """

    def __init__(self, region: str | Path | Settings | Mapping[str, Any], block: int = 512) -> None:
        """Open a region.

        Raises
        ------
        InputError
            The config or its files have to be mended.
        """
        self._settings = read_settings(region)
        self._opened: Opened = open_region(self._settings, block)
        self._readers = {
            role: BlockReader(aligned) for role, aligned in self._opened.inputs.rasters.items()
        }

    def at(self, x: float, y: float, crs: str | None = None) -> Answer:
        """Explain the cell that holds a point.

        Parameters
        ----------
        x, y : float
            The point, in `crs` or, without it, in the grid's CRS.
        crs : str, optional
            Such as "EPSG:4326" (x is then the longitude).

        Returns
        -------
        dict
            JSON-ready; layers hold the values a run stores, with the config's precision. A cell
            without an answer has `masked` (why) and no layers.

        Raises
        ------
        InputError
            The point lies off the grid, or there is no such CRS.
        UnusableInputError
            An input cannot be read there.
        """
        grid = self._opened.inputs.grid
        place = (x, y) if crs is None else point_in(crs_text(crs), grid.crs_wkt, x, y)
        row, col = grid.rowcol(*place)
        if not (0 <= row < grid.height and 0 <= col < grid.width):
            raise InputError(
                f"the point {x:.10g}, {y:.10g} lies off the grid: column {col}, row {row} of "
                f"{grid.width} x {grid.height} cells; check order (x, y) and CRS"
            )
        head = {"x": x, "y": y, "crs": crs, "row": row, "column": col}
        values = self._values(row, col)
        inputs = {role: self._input(role, value, row, col) for role, value in values.items()}
        return head | {"title": self._settings.title, "inputs": inputs} | self._answer(values)

    def _values(self, row: int, col: int) -> dict[str, float]:
        """Inputs of a cell, read by its whole block, as a run reads them."""
        block = self._opened.inputs.grid.block_at(row, col)
        read = {
            role: float(reader.read(block)[row - block.row, col - block.col])
            for role, reader in self._readers.items()
        }
        return self._opened.inputs.constants | read

    def _input(self, role: str, value: float, row: int, col: int) -> Answer:
        found: Answer = {
            "key": key_of(role),
            "value": value if np.isfinite(value) else None,
            "unit": self._opened.inputs.unit_of(self._settings, role),
        }
        aligned = self._opened.inputs.rasters.get(role)
        if aligned is None:
            return found | {"method": "number"}
        found["method"] = aligned.method
        pixel = aligned.pixel(row, col) if aligned.method == "cell for cell" else None
        if pixel is not None:
            found |= {"file": pixel[0], "pixel_column": pixel[1], "pixel_row": pixel[2]}
        return found

    def _answer(self, values: dict[str, float]) -> Answer:
        missing = [key_of(role) for role, value in values.items() if not np.isfinite(value)]
        if missing:
            return {"masked": f"no value in {', '.join(missing)}"}
        names = self._names(values)
        if NOT_SOIL in names:
            return {"texture": ", ".join(names), "masked": f'mapped to "{NOT_SOIL}"'}
        region = self._region(names, values.get("root_depth", 0.0))
        recipe = make_recipe(region)
        cell = {role: np.array([[value]]) for role, value in values.items()}
        result = compute_cells(recipe, cell, (1, 1))
        return (
            self._soil(region, names, values)
            | self._water(region, recipe, cell)
            | {
                "target_load_t_per_ha_per_year": self._settings.hazard.target_load,
                "limited_by": _limit(result),
                "days_per_year": recipe.days,
                **self._stored(result),
                "hazard_class_name": region.scheme.names[int(result.hazard_class[0, 0]) - 1],
                "hazard_scheme": region.scheme.title,
            }
        )

    def _names(self, values: dict[str, float]) -> list[str]:
        """Texture classes of the cell's layers; none where a regression takes the fractions."""
        if self._settings.soil.method != "classes":
            return []
        return [self._texture(values, end) for end in self._opened.inputs.layers]

    def _profile(self, region: Region, values: Mapping[str, float]) -> Profile | Column:
        """The cell's soil as the exact solution takes it."""
        settings = self._settings
        if settings.soil.method == "classes":
            return profile_of(settings, region.sets[0], region.soils.stacks[0])
        soil = self._regressed(values)
        if settings.root_zone is None:
            return soil
        return Column((soil,), (), settings.root_zone.suction)

    def _regressed(self, values: Mapping[str, float]) -> Profile:
        arrays = {role: np.array([value]) for role, value in values.items()}
        sand, clay, wrong = fractions_in_percent(
            arrays["sand"], arrays["clay"], arrays.get("silt"), self._opened.inputs.fraction_divisor
        )
        if wrong[0]:
            raise InputError(self._settings.fault("soil.sand", "fractions that cannot be here"))
        method = self._settings.soil.method
        given = {"sand": float(sand[0]), "clay": float(clay[0])}
        needs = METHODS[method].needs
        return profile_of_fractions(method, given | ({needs: values[needs]} if needs else {}))

    def _texture(self, values: dict[str, float], end: str) -> str:
        """Texture class of a layer of the cell."""
        codes = self._settings.soil.codes
        if f"texture{end}" not in values:
            return codes[int(self._opened.inputs.texture_number(values, end))]
        code = values[f"texture{end}"]
        if code not in codes:
            raise InputError(
                self._settings.fault("soil.classes", f"the cell's code {code:g} is not mapped")
            )
        return codes[int(code)]

    def _region(self, names: Sequence[str], root_m: float) -> Region:
        """A region in which only this cell's soils occur; its curve has the nodes of a run's."""
        opened, inputs = self._opened, self._opened.inputs
        if not names:
            seen = BlockScan({}, {}, 1)
            soils = Occurring((), {})
            return Region(self._settings, inputs, seen, (), soils, opened.scheme, None, ())
        key = stack_key([TEXTURES.index(name) for name in names])
        seen = BlockScan({}, {}, 1, {}, {(key, root_m): 1})
        if not inputs.stacked:
            code = float(next(c for c, name in self._settings.soil.codes.items() if name in names))
            seen = BlockScan({}, {("", code): Sighting(1, 0, 0)}, 1)
        soils = occurring(self._settings, inputs, seen)
        return Region(self._settings, inputs, seen, opened.sets, soils, opened.scheme, None, ())

    def _soil(self, region: Region, names: Sequence[str], values: dict[str, float]) -> Answer:
        if not names:
            method = METHODS[self._settings.soil.method]
            soil = vars(self._regressed(values)) | {"source": method.source}
            used = parameters(region, ())
            return {
                "texture": "fractions",
                "parameter_set": used["set"],
                "conductivity": used["conductivity"],
                "parameters": soil,
            }
        soils, stack = region.sets[0], region.soils.stacks[0]
        edges = (0.0, *self._settings.soil.bottoms)
        rows = [soil_for(soils, name) for name in names]
        found: Answer = {
            "texture": ", ".join(names),
            "parameter_set": soils.name,
            "conductivity": soils.conductivity,
            "parameters": vars(rows[0].profile) | {"source": rows[0].source},
        }
        if len(names) > 1:
            found["soil_layers"] = [
                {"texture": row.texture, "top_m": top, **vars(row.profile), "source": row.source}
                for row, top in zip(rows, edges, strict=True)
            ]
            found["rise_through"] = list(stack.soils)
        return found

    def _water(self, region: Region, recipe: Recipe, cell: dict[str, Array]) -> Answer:
        """Depth, salinity and demand, of the year or of each season, and what the soil lifts."""
        root = float(cell["root_depth"][0, 0]) if "root_depth" in cell else 0.0
        profile = self._profile(region, {role: float(v[0, 0]) for role, v in cell.items()})
        seasons = []
        for season, water in zip(recipe.seasons, converted(recipe, cell), strict=True):
            depth = float(water.depth[0, 0])
            found: Answer = {
                "name": season.name,
                "days": season.days,
                "depth_m": depth,
                "tds_g_per_l": float(water.tds[0, 0]),
                "demand_mm": float(water.demand[0, 0]),
                "percolation_mm": float(water.percolation[0, 0]),
                **_exact(profile, depth - root),
            }
            lifted = found["max_evaporation_exact"] * season.days
            surface = depth <= SURFACE_DEPTH_M
            found["evaporation_mm"] = (
                found["demand_mm"] if surface else min(lifted, found["demand_mm"])
            )
            seasons.append(found)
        if recipe.seasonal:
            zone = {"root_depth_m": root, "root_suction_m": self._suction}
            return {"seasons": seasons} | (zone if self._settings.root_zone else {})
        year = seasons[0]
        names = ("depth_m", "tds_g_per_l", *_EXACT)
        shown = {name: year[name] for name in names}
        shown["demand_mm_per_day"] = year["demand_mm"] / year["days"]
        if self._settings.root_zone:
            shown |= {"root_depth_m": root, "root_suction_m": self._suction}
        return shown

    @property
    def _suction(self) -> float | None:
        zone = self._settings.root_zone
        return zone.suction if zone is not None else None

    def _stored(self, result: CellResult) -> Answer:
        rounded = self._settings.output.precision == "rounded"
        layers: Answer = {
            name: float(single(values, result.valid, rounded=rounded)[0, 0])
            for name, values in result.values.items()
            if name in BASIC or name in self._settings.layers
        }
        return layers | {"hazard_class": int(result.hazard_class[0, 0])}


_EXACT = ("max_evaporation_exact", "max_evaporation_closed_form", "closed_form_over_exact")


def _exact(profile: Profile | Column, rise_m: float) -> Answer:
    """Maximum evaporation by the full equation without a curve, and by the closed form."""
    at = max(rise_m, SURFACE_DEPTH_M)
    exact = float(profile.evaporation(np.array([at]))[0][0])
    closed = _closed_form(profile, at)
    return {
        "max_evaporation_exact": exact,
        "max_evaporation_closed_form": closed,
        "closed_form_over_exact": None if closed is None or exact == 0 else closed / exact,
    }


def _closed_form(profile: Profile | Column, depth_m: float) -> float | None:
    """Deep-water limit of a law, where it has one."""
    if isinstance(profile, Column) and len(profile.layers) == 1:
        profile = profile.layers[0]
    if isinstance(profile, Campbell):
        return float(
            closed_form_evaporation(depth_m, profile.air_entry_m, profile.b, profile.ks_mm_per_day)
        )
    if isinstance(profile, GardnerPower):
        return float(gardner_limiting_rate(depth_m, profile.a, profile.n))
    return None


def _limit(result: CellResult) -> str:
    """What holds evaporation: water at the surface, the demand or the soil."""
    if result.counts["at_surface"]:
        return "water at surface: the demand evaporates"
    return "evaporative demand" if result.counts["demand_limited"] else "soil"
