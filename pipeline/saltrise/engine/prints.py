"""Fingerprints of everything a region reads, and whether any of it changed on the way."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from saltrise.engine.region import Opened
from saltrise.engine.schedule import on_threads
from saltrise.engine.stop import check_stop
from saltrise.io.fingerprint import Fingerprint, fingerprint, stamp
from saltrise.io.sources import is_remote
from saltrise.io.vrt import Rect

_SIDECARS = (".shx", ".dbf", ".prj", ".cpg")
"""Files that hold the rest of a shapefile."""


@dataclass(frozen=True)
class _File:
    path: str
    needed: Rect | None
    share: float


@dataclass(frozen=True)
class Prints:
    """Fingerprints of all inputs by path, and the stamps they had when they were taken."""

    found: dict[str, Fingerprint]
    stamps: dict[str, tuple[str, ...]]

    def changed(self) -> list[str]:
        """Inputs that are no longer what they were, by their stamps."""
        return [path for path, old in self.stamps.items() if stamp(path) != old]

    def remote(self) -> list[str]:
        """Inputs that come over a network."""
        return [path for path in self.stamps if is_remote(path)]

    def entries(self, shown: Callable[[str], str]) -> list[dict[str, Any]]:
        """Inputs as run.json and the run's identity hold them."""
        return [
            {"file": shown(path), "size_bytes": f.size, "sha256": f.sha256, "covers": f.covers}
            for path, f in self.found.items()
        ]


def take_prints(opened: Opened, done: Callable[[int, int], None]) -> Prints:
    """Fingerprint every file of a region.

    Raises
    ------
    BrokenInputError
        A file cannot be read.
    """
    files = _files(opened)
    seen = 0

    def heard(_: Fingerprint) -> None:
        nonlocal seen
        seen += 1
        done(seen, len(files))

    stamps = {file.path: stamp(file.path) for file in files}
    prints = on_threads(
        lambda file: fingerprint(file.path, file.needed, file.share, check_stop),
        files,
        opened.settings.workers,
        heard,
    )
    paths = [file.path for file in files]
    return Prints(dict(zip(paths, prints, strict=True)), stamps)


def _files(opened: Opened) -> list[_File]:
    files: dict[str, _File] = {}
    for aligned in opened.inputs.rasters.values():
        for tile in aligned.mosaic.tiles:
            needed = aligned.needed(tile) or (0, 0, 0, 0)
            share = needed[2] * needed[3] / (tile.file.width * tile.file.height)
            files.setdefault(tile.file.path, _File(tile.file.path, needed, share))
    for path in _tables(opened):
        files[str(path)] = _File(str(path), None, 1.0)
    return list(files.values())


def _tables(opened: Opened) -> list[Path]:
    """Files other than rasters: zones, and the user's own parameters and scheme."""
    settings = opened.settings
    paths = []
    if settings.zones is not None:
        paths.append(settings.zones_file)
        if settings.zones_file.suffix.lower() == ".shp":
            paths += [settings.zones_file.with_suffix(suffix) for suffix in _SIDECARS]
    own = [name for name in settings.soil.sets if name.lower().endswith(".csv")]
    own += [settings.hazard.scheme] if settings.hazard.scheme.endswith(".toml") else []
    paths += [settings.base / name for name in own]
    return [path for path in paths if path.is_file()]
