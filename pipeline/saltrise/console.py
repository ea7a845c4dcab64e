"""What a person reads on the terminal: progress, survey and summary."""

from __future__ import annotations

import json
import sys
import time
from typing import TYPE_CHECKING, Any, TextIO

from saltrise.layers import MASK_REASONS

if TYPE_CHECKING:
    from collections.abc import Sequence

    from saltrise.compare import Comparison
    from saltrise.engine.estimate import Estimate
    from saltrise.engine.region import Region
    from saltrise.job import Listener
    from saltrise.physics.soils import SoilSet
    from saltrise.result import Result


class Ears:
    """Several listeners as one."""

    def __init__(self, listeners: Sequence[Listener]) -> None:
        self._listeners = listeners

    def stage(self, name: str, total: int, cells: int = 0, done: int = 0) -> None:
        """Tell all of a new stage."""
        for listener in self._listeners:
            listener.stage(name, total, cells, done)

    def advance(self) -> None:
        """Tell all of a step."""
        for listener in self._listeners:
            listener.advance()


class Progress:
    """Progress of a run: one line redrawn on a terminal, a line a stage and tenth when piped.

    A class because it holds where the line stands between calls.
    """

    def __init__(self, stream: TextIO = sys.stderr) -> None:
        self._stream = stream
        self._live = stream.isatty()
        self._name = ""
        self._total = self._done = self._earlier = self._cells = 0
        self._began = self._drawn = 0.0

    def stage(self, name: str, total: int, cells: int = 0, done: int = 0) -> None:
        """Begin a stage of `total` steps, `done` of them by an earlier run; of `cells` cells."""
        self._close()
        self._name, self._total, self._done, self._cells = name, total, done, cells
        self._earlier = done
        self._began = time.monotonic()
        if done:
            print(f"{name}: {done} of {total} done by an earlier run", file=self._stream)

    def advance(self) -> None:
        """One step of the stage is done."""
        self._done += 1
        last = self._done >= self._total
        if self._live:
            now = time.monotonic()
            if last or now - self._drawn > 0.2:
                self._drawn = now
                self._stream.write(f"\r\x1b[2K{self._line()}")
                self._stream.flush()
        elif last or self._done * 10 // self._total > (self._done - 1) * 10 // self._total:
            print(self._line(), file=self._stream, flush=True)

    def _line(self) -> str:
        text = f"{self._name}: {self._done}/{self._total}"
        spent = time.monotonic() - self._began
        made = self._done - self._earlier
        if self._cells and spent > 0 and made:
            rate = self._cells * made / self._total / spent
            left = spent * (self._total - self._done) / made
            text += f", {_count(rate)} cells/s, {_duration(left)} left"
        return text

    def _close(self) -> None:
        if self._live and self._total:
            self._stream.write("\r\x1b[2K")
            self._stream.flush()
        self._total = 0

    def close(self) -> None:
        """Leave the terminal's line clean."""
        self._close()


def _count(number: float) -> str:
    for size, letter in ((1e9, "G"), (1e6, "M"), (1e3, "k")):
        if number >= size:
            return f"{number / size:.3g} {letter}"
    return f"{number:.3g}"


def _duration(seconds: float) -> str:
    if seconds < 90:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


def print_summary(result: Result) -> None:
    """Print what a finished run found: classes, worst zones, what was masked, where things are."""
    record = result.record
    region, counts = record["region"], record["counts_cells"]
    assessed = region["assessed_ha"]
    scheme = record["hazard_scheme"]
    print(f"{record['title']}: {scheme['title']}")
    for name, label in zip(_class_keys(region), scheme["names"], strict=True):
        area = region[name]
        share = f"{100 * area / assessed:5.1f} %" if assessed and name != "at_surface_ha" else ""
        print(f"  {label:<18}{area:>14,.1f} ha  {share}")
    load = region["salt_load_t_per_year"]
    mean = f" (mean {load / assessed:.3g} t/ha)" if assessed else ""
    print(f"  gross salt rise {load:,.0f} t/year on {assessed:,.0f} ha{mean}")
    _print_worst(record)
    _print_masked(counts)
    _print_sets(record)
    for text in record["warnings"]:
        print(f"Warning: {text}")
    print("Screening level, upper estimate for bare soil; verify with field sampling.")
    print(f"Written to {result.folder}")


_DECIDES, _MATTERS = 3.0, 1.3
"""Highest over lowest total from which the choice of a parameter set is called that."""


def _print_sets(record: dict[str, Any]) -> None:
    used, loads = record["parameters"]["set"], record.get("salt_load_by_set_t_per_year")
    if not loads:
        print(f"Soil parameters: {used}. Another set can change the answer tenfold: see README.")
        return
    print(f"Soil parameters: {used}. Salt rise by set:")
    for name, load in loads.items():
        print(f"  {name:<32}{load:>16,.0f} t/year")
    low, high = min(loads.values()), max(loads.values())
    if low > 0:
        factor = high / low
        words = "decides the answer" if factor > _DECIDES else "matters"
        words = words if factor > _MATTERS else "matters little"
        print(f"  the choice of set {words} here: highest over lowest is {factor:.3g}")


def _class_keys(region: dict[str, Any]) -> list[str]:
    keys = ["very_low_ha", "low_ha", "moderate_ha", "high_ha", "very_high_ha", "at_surface_ha"]
    return [key for key in keys if key in region]


def _print_worst(record: dict[str, Any]) -> None:
    worst = record["worst_zones"]
    if not worst:
        return
    print(f"Worst zones by {record['config']['hazard']['rank_by'].replace('_', ' ')}:")
    for zone in worst:
        print(
            f"  {zone['rank']:>3}  {zone['zone_id']} {zone['name']}: "
            f"{zone['salt_load_mean_t_per_ha_per_year']:.3g} t/ha/year, "
            f"{zone['salt_load_t_per_year']:,.0f} t/year, "
            f"{zone['too_shallow_ha']:,.0f} ha too shallow"
        )


def _print_masked(counts: dict[str, int]) -> None:
    cells = counts["cells"]
    masked = cells - counts["assessed"] - counts["at_surface"]
    print(f"{masked:,} of {cells:,} cells have no answer" + (":" if masked else ""))
    for reason, text in MASK_REASONS.items():
        if counts.get(reason):
            print(f"  {counts[reason]:>14,}  {text}")
    print(f"{counts['demand_limited']:,} cells are limited by evaporative demand")


def print_details(result: Result) -> None:
    """Print how inputs were aligned and which parameter values were used."""
    record = result.record
    for key, how in record["alignment"].items():
        print(f"{key}: {how}")
    for row in record["parameters"]["classes"]:
        values = ", ".join(f"{key} {value}" for key, value in row.items())
        print(f"Parameters: {values}")
    for name, found in record["statistics"].items():
        print(f"{name}: {found['minimum']:.6g} to {found['maximum']:.6g}, mean {found['mean']:.6g}")


def print_survey(region: Region, doubts: list[str], estimate: Estimate, output: str) -> None:
    """Print what `check` found: grid, inputs, ranges, codes, profiles, zones, cost, doubts."""
    grid = region.inputs.grid
    print(f"{region.settings.title}: ready to run")
    print(f"Grid: {grid.describe()}")
    print("Inputs:")
    for role, aligned in region.inputs.rasters.items():
        seen = region.found.ranges[role]
        span = f"{seen.low:g} to {seen.high:g}"
        print(
            f"  {role}: {len(aligned.mosaic.tiles)} file(s), {aligned.describe()}; "
            f"{span}, {seen.nodata:,} cells without value"
        )
    for role, value in region.inputs.constants.items():
        print(f"  {role}: {value:g} everywhere")
    print(f"  every input has a value in {region.found.complete:,} cells")
    _print_codes(region)
    names = ", ".join(soils.name for soils in region.sets)
    if region.settings.soil.method == "classes":
        print(f"Soil profiles: {len(region.soils.stacks)} of {names}")
    else:
        print(f"Soil from fractions, cell by cell: {region.settings.soil.method}")
    if region.zones is not None:
        print(f"Zones: {len(region.zones.ids)}")
    print(
        f"Expected: {estimate.tiles} tiles, {estimate.memory_gb:.2g} GB memory, "
        f"{estimate.scratch_gb:.2g} GB scratch, {estimate.final_gb:.2g} GB final, "
        f"about {_duration(estimate.seconds)}"
    )
    if output:
        print(f"Output: {output}")
    for text in (*region.warnings, *doubts):
        print(f"Warning: {text}")


def print_files(region: Region) -> None:
    """Print every raster file of a region."""
    for role, aligned in region.inputs.rasters.items():
        for tile in aligned.mosaic.tiles:
            file = tile.file
            print(f"{role}: {file.path}: {file.width} x {file.height}, {file.dtype}")


def _print_codes(region: Region) -> None:
    for (end, code), seen in sorted(region.found.codes.items()):
        name = region.settings.soil.codes.get(int(code), "?")
        layer = f"layer {region.inputs.layers.index(end) + 1}: " if end else ""
        print(f"  {layer}code {code:g} = {name}: {seen.count:,} cells")


_PARAMETERS = {
    "air_entry_m": "air entry [m]",
    "alpha_per_m": "alpha [1/m]",
    "a": "a [mm/day m^n]",
    "b": "b [-]",
    "c": "c [m^n]",
    "n": "n [-]",
    "theta_s": "theta_s [-]",
    "theta_r": "theta_r [-]",
    "ks_mm_per_day": "Ks [mm/day]",
}


def print_soils(sets: list[SoilSet], depths: dict[tuple[str, str], float]) -> None:
    """Print parameter sets with values, sources and the depth for 1 mm/day [m]."""
    for soils in sets:
        print(f"{soils.name}: {soils.title} ({soils.conductivity})")
        first = vars(next(iter(soils.rows.values())).profile)
        unknown = ("theta_s", "theta_r") if first.get("theta_s") is None else ()
        names = [name for name in first if name not in unknown]
        heads = "".join(f"{_PARAMETERS[name]:>15}" for name in names)
        print(f"  {'texture':<17}{heads}{'1 mm/day at [m]':>17}  source")
        for row in soils.rows.values():
            numbers = "".join(f"{vars(row.profile)[name]:>15.5g}" for name in names)
            depth = depths[soils.name, row.texture]
            print(f"  {row.texture:<17}{numbers}{depth:>17.3g}  {row.source}")
        print()


def print_comparison(
    sets: list[SoilSet], rates: dict[tuple[str, str], float], depth_m: float
) -> None:
    """Print the maximum evaporation [mm/day] of every class under every set side by side."""
    print(f"Maximum steady evaporation [mm/day] over a water table at {depth_m:g} m, by set:")
    widths = [max(len(soils.name), 9) + 2 for soils in sets]
    heads = "".join(f"{s.name:>{w}}" for s, w in zip(sets, widths, strict=True))
    print(f"{'texture':<17}{heads}")
    for texture in dict.fromkeys(texture for _, texture in rates):
        cells = [rates.get((soils.name, texture)) for soils in sets]
        shown = ("no row" if rate is None else f"{rate:.4g}" for rate in cells)
        row = "".join(f"{text:>{w}}" for text, w in zip(shown, widths, strict=True))
        print(f"{texture:<17}{row}")


def print_change(found: Comparison) -> None:
    """Print what a comparison of two runs found."""
    for line in found.lines():
        print(line)
    print(f"Written to {found.folder}")


def print_json(content: dict[str, Any]) -> None:
    """Print one JSON object on a line of its own."""
    print(json.dumps(content, ensure_ascii=False, allow_nan=False))


def print_text(text: str) -> None:
    """Print text as it is."""
    print(text, end="" if text.endswith("\n") else "\n")


def print_faults(faults: tuple[str, ...]) -> None:
    """Print what the user has to mend, one fault a line."""
    for fault in faults:
        print(f"saltrise: {fault}", file=sys.stderr)
