"""A validated region: the tables of its config, and what follows from them."""

from __future__ import annotations

import math
import os
import re
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from saltrise.errors import InputError
from saltrise.layers import (
    PER_SEASON,
    SEASONS,
    SEVERAL_SETS,
    season_layer,
)
from saltrise.settings.lines import Key
from saltrise.settings.model import (
    ClimateTable,
    GridTable,
    GroundwaterTable,
    HazardTable,
    OutputTable,
    RasterInput,
    RootZoneTable,
    RunTable,
    SeasonTable,
    SoilTable,
    SurfaceTable,
    Tables,
    WaterTable,
    ZonesTable,
    resolve,
)
from saltrise.settings.rules import WARN_ACCURACY_M, rule_faults
from saltrise.units import DAYS_PER_YEAR


@dataclass(frozen=True)
class Settings:
    """A validated region.

    `source` names the config in messages, `base` is the folder its paths are relative to.
    """

    tables: Tables
    source: str
    base: Path
    lines: Mapping[Key, int] = field(default_factory=dict, repr=False)

    @property
    def title(self) -> str:
        """Title, or the config's own name."""
        return self.tables.title or Path(self.source).stem

    @property
    def grid(self) -> GridTable | None:
        """Table `[grid]`."""
        return self.tables.grid

    @property
    def water_table(self) -> WaterTable:
        """Table `[water_table]`."""
        return self.tables.water_table

    @property
    def soil(self) -> SoilTable:
        """Table `[soil]`."""
        return self.tables.soil

    @property
    def groundwater(self) -> GroundwaterTable:
        """Table `[groundwater]`."""
        return self.tables.groundwater

    @property
    def climate(self) -> ClimateTable:
        """Table `[climate]`."""
        return self.tables.climate

    @property
    def seasons(self) -> tuple[SeasonTable, ...]:
        """Tables `[[season]]`; none where the year is one."""
        return tuple(self.tables.season)

    @property
    def root_zone(self) -> RootZoneTable | None:
        """Table `[root_zone]`."""
        return self.tables.root_zone

    @property
    def days_per_year(self) -> float:
        """Days of all seasons, or of a year without."""
        return math.fsum(s.days for s in self.seasons) if self.seasons else DAYS_PER_YEAR

    @property
    def surface(self) -> SurfaceTable:
        """Table `[surface]`."""
        return self.tables.surface

    @property
    def hazard(self) -> HazardTable:
        """Table `[hazard]`."""
        return self.tables.hazard

    @property
    def zones(self) -> ZonesTable | None:
        """Table `[zones]`."""
        return self.tables.zones

    @property
    def output(self) -> OutputTable:
        """Table `[output]`."""
        return self.tables.output

    @property
    def run(self) -> RunTable:
        """Table `[run]`."""
        return self.tables.run

    @property
    def workers(self) -> int:
        """Threads or processes at work: as set, else the cores this process may use."""
        if self.run.workers is not None:
            return self.run.workers
        return (
            len(os.sched_getaffinity(0))
            if hasattr(os, "sched_getaffinity")
            else (os.cpu_count() or 1)
        )

    @property
    def layers(self) -> tuple[str, ...]:
        """Layers to write.

        Unless they are chosen, a list of parameter sets and seasons add their own; layers of
        single seasons follow where they are asked for.
        """
        chosen = list(self.output.layers)
        if "layers" not in self.output.model_fields_set:
            chosen += SEVERAL_SETS if len(self.soil.sets) > 1 else ()
            chosen += SEASONS if self.seasons else ()
            chosen += ("response_time",) if self.seasons and self._shipped_classes else ()
        if self.output.season_layers:
            chosen += [season_layer(s.name, layer) for s in self.seasons for layer in PER_SEASON]
        return tuple(chosen)

    @property
    def _shipped_classes(self) -> bool:
        """Whether soils are classes of a shipped set, which has a retention curve."""
        return self.soil.method == "classes" and not self.soil.sets[0].lower().endswith(".csv")

    @property
    def output_folder(self) -> Path:
        """Folder of the finished run."""
        return Path(os.path.normpath(self.base / self.output.folder))

    @property
    def zones_file(self) -> Path:
        """Polygon file of the zones."""
        assert self.zones is not None
        return self.base / self.zones.file

    @property
    def warnings(self) -> tuple[str, ...]:
        """Doubts about the settings that do not stop a run."""
        doubts = []
        accuracy = self.water_table.ground_accuracy
        if accuracy is not None and accuracy > WARN_ACCURACY_M:
            doubts.append(
                f"water_table.ground_accuracy: {accuracy} m is coarse against depths of a few "
                "metres; loads of single cells are uncertain"
            )
        if self.soil.layer and self.soil.from_fractions:
            doubts.append("soil.layer: fractions of layers are reduced to USDA texture classes")
        if self.seasons and not any(s.rain or s.irrigation for s in self.seasons):
            doubts.append(
                "season: no rain or irrigation is given, so the estimate is for land that gets "
                "neither"
            )
        return tuple(doubts)

    def like_input(self) -> RasterInput:
        """The raster that `grid.like` names."""
        assert self.grid is not None
        assert self.grid.like is not None
        return RasterInput(paths=(resolve(self.base, self.grid.like),), given=self.grid.like)

    def with_run(self, *, workers: int | None = None, scheduler: str | None = None) -> Settings:
        """The same region with other workers or another scheduler, where they are given.

        Raises
        ------
        InputError
            There is no such scheduler.
        """
        given = {"workers": workers, "scheduler": scheduler}
        changed = {key: value for key, value in given.items() if value is not None}
        faults = rule_faults({"run": changed}, self.base) if scheduler is not None else []
        said = [text for key, text in faults if key == ("run", "scheduler")]
        if said:
            raise InputError(*(f"--scheduler: {text}" for text in said))
        run = self.run.model_copy(update=changed)
        return replace(self, tables=self.tables.model_copy(update={"run": run}))

    def fault(self, key: str, message: str) -> str:
        """`file:line: key: message`, the line being the key's, its table's or the first.

        Entries of lists are counted from 1, in keys as in messages: `season[2].days`.
        """
        parts = re.findall(r"[^.\[\]]+", key)
        found = (int(part) - 1 if part.isdecimal() else part for part in parts)
        return fault_text(self.source, self.lines, tuple(found), message)

    def shown(self, path: str) -> str:
        """A file's path for the record: relative to the config's folder where it is below it."""
        if path.startswith("/vsi") or "://" in path:
            return path.removeprefix("/vsicurl/")
        return Path(os.path.relpath(path, self.base)).as_posix()

    def resolved(self) -> dict[str, Any]:
        """The config with all defaults, paths as given, without `[run]`; JSON-ready."""
        content = self.tables.model_dump(mode="json", exclude={"run"}, exclude_none=True)
        content["title"] = self.title
        content["output"]["layers"] = list(self.layers)
        for optional in ("season", "layer"):
            for table in (content, content["soil"]):
                if table.get(optional) == []:
                    del table[optional]
        return content


def fault_text(source: str, lines: Mapping[Key, int], key: Key, message: str) -> str:
    """`file:line: key: message`, the line being the key's, its table's or the first.

    Entries of lists are counted from 1: `season[2].days`.
    """
    name = ""
    for part in key:
        name += f"[{part + 1}]" if isinstance(part, int) else f".{part}"
    name = name.removeprefix(".")
    for end in range(len(key), 0, -1):
        if key[:end] in lines:
            return f"{source}:{lines[key[:end]]}: {name}: {message}"
    return f"{source}:1: {name}: {message}"
