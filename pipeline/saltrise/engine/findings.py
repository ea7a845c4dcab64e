"""What a scan means for the user: faults that stop the run and warnings that go with it."""

from __future__ import annotations

from typing import TYPE_CHECKING

from saltrise.engine.inputs import FRACTIONS, Inputs, base_role, key_of
from saltrise.engine.survey import BlockScan, Range, Sighting
from saltrise.physics.soils import NOT_SOIL
from saltrise.units import depth_in_m, evaporation_in_mm_per_day, tds_in_g_per_l

if TYPE_CHECKING:
    from saltrise.settings import Settings

_NEVER_NEGATIVE = frozenset(
    {
        "salinity",
        "potential_evaporation",
        "rain",
        "irrigation",
        "root_depth",
        "organic_matter",
        "bulk_density",
    }
)


def never_negative(role: str) -> bool:
    """Whether an input cannot hold a number below zero."""
    return base_role(role) in _NEVER_NEGATIVE


_SHOWN = 10

# Values beyond these are possible but far more often a wrong unit or an undeclared nodata.
_WATER_ABOVE_M = 10.0
_DEEP_M = 500.0
_BRINE_G_PER_L = 350.0
_FAST_MM_PER_DAY = 30.0


def faults(settings: Settings, inputs: Inputs, found: BlockScan) -> list[str]:
    """Every fault of the inputs' values, as `file:line: key: what, rule, what to do`."""
    lines = []
    for role, seen in found.ranges.items():
        key = key_of(role)
        if seen.valid == 0:
            lines.append(settings.fault(key, _all_nodata(inputs, role)))
        elif never_negative(role) and seen.negative:
            lines.append(
                settings.fault(
                    key,
                    f"{seen.negative.count} cells are negative (lowest {seen.low:g}, first at "
                    f"{_place(inputs, role, seen.negative)}), must be 0 or more; if the value "
                    "marks missing cells, declare it as nodata in this table",
                )
            )
    if not lines and found.complete == 0:
        lines.append(
            f"{settings.source}: no cell of the region has a value in every input, so nothing can "
            "be computed; check the extents and nodata of the inputs against each other"
        )
    return (
        lines
        + _fraction_faults(settings, inputs, found)
        + _code_faults(settings, inputs, found.codes)
    )


def _fraction_faults(settings: Settings, inputs: Inputs, found: BlockScan) -> list[str]:
    faults = []
    for end, wrong in found.wrong_fractions.items():
        rasters = [name + end for name in FRACTIONS if name + end in inputs.rasters]
        where = _place(inputs, rasters[0], wrong) if rasters else "every cell"
        rule = (
            "sand, clay and silt must add up to 100 % within 2 %"
            if settings.soil.parts[end].silt is not None
            else "sand and clay must not exceed 100 % together"
        )
        text = (
            f"fractions that cannot be in {wrong.count} cells (first at {where}): {rule} and none "
            f"may be negative; check soil.unit ({settings.soil.unit}) and nodata"
        )
        faults.append(settings.fault(key_of(f"sand{end}"), text))
    return faults


def _all_nodata(inputs: Inputs, role: str) -> str:
    if role not in inputs.rasters:
        return "ground and elevation have no cell of the region in common; check their extents"
    files = [tile.file.path for tile in inputs.rasters[role].mosaic.tiles]
    names = ", ".join(files[:3]) + (f" and {len(files) - 3} more" if len(files) > 3 else "")
    return f"{names}: band 1: every cell of the region is nodata; check nodata, extent and CRS"


def _code_faults(
    settings: Settings, inputs: Inputs, codes: dict[tuple[str, float], Sighting]
) -> list[str]:
    faults = []
    for end in inputs.layers:
        found = {code: seen for (layer, code), seen in codes.items() if layer == end}
        faults += _layer_code_faults(settings, inputs, end, found)
    return faults


def _layer_code_faults(
    settings: Settings, inputs: Inputs, end: str, codes: dict[float, Sighting]
) -> list[str]:
    known, role = settings.soil.codes, f"texture{end}"
    constant = inputs.constants.get(role)
    if constant is not None and constant not in known:
        text = f"the code {constant:g} is not mapped in [soil.classes]; map it to a texture class"
        return [settings.fault(key_of(role), text)]
    unknown = {code: seen for code, seen in sorted(codes.items()) if code not in known}
    lines = [
        f"{f'{code:g}' if code == int(code) else repr(code)} ({seen.count} cells, first at "
        f"{_place(inputs, role, seen)})"
        for code, seen in list(unknown.items())[:_SHOWN]
    ]
    if not lines:
        return []
    more = f" and {len(unknown) - _SHOWN} more codes" if len(unknown) > _SHOWN else ""
    which = f" of layer {inputs.layers.index(end) + 1}" if end else ""
    return [
        settings.fault(
            "soil.classes",
            f"the texture raster{which} holds "
            f"{'codes that are' if len(unknown) > 1 else 'a code that is'}"
            f" not mapped: {'; '.join(lines)}{more}; map each to a texture class, or to "
            f'"{NOT_SOIL}" to mask it',
        )
    ]


def _place(inputs: Inputs, role: str, seen: Sighting) -> str:
    x, y = inputs.grid.xy(seen.row, seen.col)
    where = f"column {seen.col}, row {seen.row} of the region's grid, x {x:.10g}, y {y:.10g}"
    aligned = inputs.rasters[role]
    if aligned.method != "cell for cell":
        return where
    file = aligned.pixel(seen.row, seen.col)
    return f"{where}: {file[0]}, pixel column {file[1]}, row {file[2]}" if file else where


def warnings(settings: Settings, ranges: dict[str, Range]) -> list[str]:
    """Every finding that does not stop the run but may make its answer wrong."""
    lines = []
    for role, seen in ranges.items():
        if seen.low is not None and seen.high is not None:
            lines += _doubts(settings, role, seen.low, seen.high)
    return [f"{key_of(role)}: {text}" for role, text in lines]


def _doubts(settings: Settings, role: str, lowest: float, highest: float) -> list[tuple[str, str]]:
    groundwater, climate, base = settings.groundwater, settings.climate, base_role(role)
    if base == "depth":
        low, high = (float(depth_in_m(v, settings.water_table.unit)) for v in (lowest, highest))
        if low < -_WATER_ABOVE_M:
            text = (
                f"water stands up to {-low:g} m above ground; if {lowest:g} marks missing cells, "
                "declare it as nodata"
            )
            return [(role, text)]
        if high > _DEEP_M:
            return [(role, f"depths reach {high:g} m; check unit and nodata")]
    if base == "salinity":
        tds = float(tds_in_g_per_l(highest, groundwater.unit, groundwater.tds_per_ec))
        if tds > _BRINE_G_PER_L:
            return [(role, f"reaches {tds:g} g/L, more than a saturated brine; check the unit")]
    if base == "potential_evaporation":
        rate = float(evaporation_in_mm_per_day(highest, climate.unit))
        if rate > _FAST_MM_PER_DAY:
            return [(role, f"reaches {rate:g} mm/day; check the unit")]
    return []
