"""One cell's whole calculation, as a specialist would check it by hand."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from saltrise.engine.config import read_settings
from saltrise.engine.inputs import ROLES
from saltrise.engine.region import Opened, Region, make_recipe, open_region
from saltrise.engine.survey import BlockScan
from saltrise.errors import InputError
from saltrise.io.align import BlockReader
from saltrise.io.encode import store
from saltrise.io.regrid import crs_text, point_in
from saltrise.layers import LAYERS
from saltrise.physics.curve import SURFACE_DEPTH_M
from saltrise.physics.laws import closed_form_evaporation, gardner_limiting_rate
from saltrise.physics.profile import Campbell, GardnerPower, Profile
from saltrise.physics.soils import NOT_SOIL, SoilRow, soil_for
from saltrise.recipe import CellResult, compute_cells, converted
from saltrise.settings import Settings
from saltrise.units import DAYS_PER_YEAR

Answer = dict[str, Any]


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
            "key": ROLES[role],
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
        texture = self._texture(values)
        missing = [ROLES[role] for role, value in values.items() if not np.isfinite(value)]
        if missing or texture == NOT_SOIL:
            reason = f"no value in {', '.join(missing)}" if missing else f'mapped to "{NOT_SOIL}"'
            return {"texture": texture, "masked": reason}
        assert texture is not None
        row = soil_for(self._opened.sets[0], texture)
        region = self._region(texture)
        recipe = make_recipe(region)
        cell = {role: np.array([[value]]) for role, value in values.items()}
        result = compute_cells(recipe, cell, (1, 1))
        depth_m, tds, demand = (float(v[0, 0]) for v in converted(recipe, cell))
        return {
            "texture": texture,
            "parameter_set": region.sets[0].name,
            "conductivity": region.sets[0].conductivity,
            "parameters": vars(row.profile) | {"source": row.source},
            "depth_m": depth_m,
            "tds_g_per_l": tds,
            "demand_mm_per_day": demand,
            "target_load_t_per_ha_per_year": self._settings.hazard.target_load,
            **_exact(row, depth_m),
            "limited_by": _limit(result),
            "days_per_year": DAYS_PER_YEAR,
            **self._stored(result),
            "hazard_class_name": region.scheme.names[int(result.hazard_class[0, 0]) - 1],
            "hazard_scheme": region.scheme.title,
        }

    def _texture(self, values: dict[str, float]) -> str | None:
        """Texture class of the cell; None where the inputs that decide it have no value."""
        codes = self._settings.soil.codes
        if "texture" in values:
            code = values["texture"]
            if not np.isfinite(code):
                return None
            if code not in codes:
                raise InputError(
                    self._settings.fault("soil.classes", f"the cell's code {code:g} is not mapped")
                )
            return codes[int(code)]
        number = self._opened.inputs.texture_number(values)
        return None if number is None else codes[number]

    def _region(self, texture: str) -> Region:
        """A region in which only this class occurs; its curve has the same nodes as in a run."""
        opened = self._opened
        nothing = BlockScan({}, {}, 1)
        return Region(
            self._settings, opened.inputs, nothing, opened.sets, (texture,), opened.scheme, None, ()
        )

    def _stored(self, result: CellResult) -> Answer:
        rounded = self._settings.output.precision == "rounded"
        layers: Answer = {}
        for name, values in result.values.items():
            if not LAYERS[name].needs:
                layers[name] = float(store(values, result.valid, rounded=rounded)[0, 0])
        return layers | {"hazard_class": int(result.hazard_class[0, 0])}


def _exact(row: SoilRow, depth_m: float) -> Answer:
    """Maximum evaporation by the full equation without a curve, and by the closed form."""
    at = max(depth_m, SURFACE_DEPTH_M)
    exact = float(row.profile.evaporation(np.array([at]))[0][0])
    closed = _closed_form(row.profile, at)
    return {
        "max_evaporation_exact": exact,
        "max_evaporation_closed_form": closed,
        "closed_form_over_exact": None if closed is None or exact == 0 else closed / exact,
    }


def _closed_form(profile: Profile, depth_m: float) -> float | None:
    """Deep-water limit of a law, where it has one."""
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


def describe(answer: Answer) -> str:
    """An answer of `Explainer.at` as lines a person checks by hand, with units and sources."""
    lines = [f"{answer['title']}: cell in column {answer['column']}, row {answer['row']}"]
    for found in answer["inputs"].values():
        value = "no value" if found["value"] is None else f"{found['value']:.9g} {found['unit']}"
        where = found["method"]
        if "file" in found:
            where = "{file}, pixel column {pixel_column}, row {pixel_row}".format(**found)
        lines.append(f"  {found['key']}: {value} ({where})")
    if "masked" in answer:
        return "\n".join([*lines, f"No answer: {answer['masked']}"])
    numbers = {k: v for k, v in answer["parameters"].items() if k != "source"}
    shown = ", ".join(f"{name} {number:.6g}" for name, number in numbers.items())
    closed = ""
    if answer["max_evaporation_closed_form"] is not None:
        closed = (
            "  closed form, the deep-water limit: {max_evaporation_closed_form:.7g} mm/day, "
            "{closed_form_over_exact:.4g} times that\n"
        )
    text = (
        "Soil: {texture}, set {parameter_set}, conductivity {conductivity}\n"
        "  {shown}; {parameters[source]}\n"
        "Depth to water table L = {depth_m:.6g} m\n"
        "Maximum steady evaporation E: L = integral from 0 to infinity of dh / (1 + E/K(h))\n"
        "  full equation: {max_evaporation_exact:.7g} mm/day\n"
        + closed
        + "  as stored: {max_evaporation:.7g} mm/day\n"
        "Evaporative demand {demand_mm_per_day:.6g} mm/day; evaporation is held by: {limited_by}\n"
        "Evaporation {evaporation:.7g} mm/year, the lesser times {days_per_year:g} days\n"
        "Salt load {salt_load:.7g} t/ha/year = mm/year x {tds_g_per_l:.6g} g/L / 100\n"
        "Critical depth {critical_depth:.6g} m for a target load of "
        "{target_load_t_per_ha_per_year:g} t/ha/year; depth margin {depth_margin:.6g} m\n"
        "Hazard class {hazard_class}: {hazard_class_name} ({hazard_scheme})"
    )
    return "\n".join([*lines, text.format(shown=shown, **answer)])
