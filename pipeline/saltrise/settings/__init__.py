"""A region's config: TOML text in, validated settings or every fault at once out."""

from __future__ import annotations

import os
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from saltrise.errors import InputError
from saltrise.layers import SEVERAL_SETS
from saltrise.settings.faults import model_faults
from saltrise.settings.lines import Key, key_lines
from saltrise.settings.model import (
    ClimateTable,
    GridTable,
    GroundwaterTable,
    HazardTable,
    OutputTable,
    RasterInput,
    RunTable,
    SoilTable,
    SurfaceTable,
    Tables,
    WaterTable,
    ZonesTable,
    resolve,
)
from saltrise.settings.rules import WARN_ACCURACY_M, rule_faults

__all__ = ["RasterInput", "Settings", "decode_config", "parse_settings", "settings_from_mapping"]


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
        """Layers to write; a list of parameter sets adds its own unless layers are chosen."""
        chosen = tuple(self.output.layers)
        added = "layers" not in self.output.model_fields_set and len(self.soil.sets) > 1
        return chosen + SEVERAL_SETS if added else chosen

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
        accuracy = self.water_table.ground_accuracy
        if accuracy is None or accuracy <= WARN_ACCURACY_M:
            return ()
        return (
            f"water_table.ground_accuracy: {accuracy} m is coarse against depths of a few metres; "
            "loads of single cells are uncertain",
        )

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
        """`file:line: key: message`, the line being the key's, its table's or the first."""
        return _fault(self.source, self.lines, tuple(key.split(".")), message)

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
        return content


def _fault(source: str, lines: Mapping[Key, int], key: Key, message: str) -> str:
    name = ".".join(str(part) for part in key)
    for end in range(len(key), 0, -1):
        if key[:end] in lines:
            return f"{source}:{lines[key[:end]]}: {name}: {message}"
    return f"{source}:1: {name}: {message}"


def decode_config(data: bytes, source: str) -> str:
    """Text of a config file.

    Raises
    ------
    InputError
        It is not UTF-8.
    """
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        raise InputError(
            f"{source}:{line}: is not UTF-8 (byte {data[error.start]:#04x}); save it as UTF-8"
        ) from error


def parse_settings(text: str, source: str, base: Path) -> Settings:
    """Settings from TOML text.

    Parameters
    ----------
    text : str
        The config.
    source : str
        Its file name, for messages.
    base : Path
        Folder that its paths are relative to.

    Raises
    ------
    InputError
        Every fault at once, each as `file:line: key: what is wrong, what is allowed`.
    """
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(_syntax(text, source, error)) from error
    return _settings(raw, source, base, key_lines(text))


def _syntax(text: str, source: str, error: tomllib.TOMLDecodeError) -> str:
    message = str(error)
    line = text.count("\n") + 1
    if "(at line " in message:
        message, _, place = message.partition(" (at line ")
        line = int(place.split(",")[0])
    return f"{source}:{line}: not TOML: {message.removesuffix(' (at end of document)')}"


def settings_from_mapping(mapping: Mapping[str, Any], base: Path) -> Settings:
    """Settings from a nested mapping shaped like the TOML file.

    Raises
    ------
    InputError
        Every fault at once.
    """
    return _settings(dict(mapping), "settings", base, {})


def _settings(raw: dict[str, Any], source: str, base: Path, lines: Mapping[Key, int]) -> Settings:
    faults = rule_faults(raw, base)
    tables = None
    try:
        tables = Tables.model_validate(_whole_codes(raw), context={"base": base})
    except ValidationError as error:
        known = {key for key, _ in faults}
        faults += [(key, text) for key, text in model_faults(error) if key not in known]
    if faults or tables is None:
        ordered = sorted(faults, key=lambda fault: _line(lines, fault[0]))
        raise InputError(*(_fault(source, lines, key, text) for key, text in ordered))
    return Settings(tables, source, base, lines)


def _line(lines: Mapping[Key, int], key: Key) -> int:
    return next((lines[key[:n]] for n in range(len(key), 0, -1) if key[:n] in lines), 1)


def _whole_codes(raw: dict[str, Any]) -> dict[str, Any]:
    """TOML keys are texts; texture codes are whole numbers."""
    soil = raw.get("soil")
    if not isinstance(soil, dict) or not isinstance(soil.get("classes"), dict):
        return raw
    classes = {
        int(code) if str(code).lstrip("-").isdecimal() else str(code): str(name)
        for code, name in soil["classes"].items()
    }
    return raw | {"soil": soil | {"classes": classes}}
