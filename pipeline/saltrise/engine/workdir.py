"""The folder of an unfinished run: its lock, tile files, records and the rename that ends it.

A run into FOLDER works in `FOLDER.unfinished`; a tile is done once its record exists. The folder
becomes FOLDER by one rename when run.json, written last, is in it.
"""

from __future__ import annotations

import io
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
from filelock import FileLock, Timeout
from numpy.typing import NDArray

from saltrise.errors import InputError
from saltrise.grid import Window
from saltrise.io import durable

FINISHED = "run.json"
KNOWN = frozenset({"layers", "zones.gpkg", "zones.csv", FINISHED})
"""What a finished run's folder may hold."""


@dataclass(frozen=True)
class Workdir:
    """Where a run works and where it ends."""

    final: Path

    @property
    def unfinished(self) -> Path:
        """The folder while the run is unfinished."""
        return self.final.with_name(self.final.name + ".unfinished")

    @property
    def work(self) -> Path:
        """Tiles, records and plan; gone when the run ends."""
        return self.unfinished / "work"


@dataclass(frozen=True)
class Record:
    """One finished tile: its window, its counts of cells, and where each part lies in its file.

    `sections` maps a part's name to its first byte and length.
    """

    index: int
    window: tuple[int, int, int, int]
    counts: dict[str, int]
    sections: dict[str, tuple[int, int]]


def check_target(final: Path, *, force: bool) -> None:
    """Refuse a target folder that a run may not replace.

    Raises
    ------
    InputError
        The folder holds a finished run and `force` is not set, holds anything but a run, is a
        file, or its parent cannot be written.
    """
    if final.exists() and not final.is_dir():
        raise InputError(f"{final}: is a file, must be a folder; name another output.folder")
    if final.is_dir():
        strangers = sorted(p.name for p in final.iterdir() if p.name not in KNOWN)
        held = any(final.iterdir())
        if strangers or (held and not (final / FINISHED).is_file()):
            what = ", ".join(strangers[:5]) or "files but no run.json"
            raise InputError(
                f"{final}: holds {what}, which is no finished run; it is left untouched, name "
                "another output.folder"
            )
        if held and not force:
            raise InputError(
                f"{final}: holds a finished run; use --force to replace it once the new run is "
                "whole, or name another output.folder"
            )
    unfinished = Workdir(final).unfinished
    if unfinished.exists() and not (unfinished.is_dir() and _is_ours(unfinished)):
        raise InputError(f"{unfinished}: is no unfinished run of this tool; move it away")


def _is_ours(unfinished: Path) -> bool:
    return (unfinished / "work").is_dir() or not any(unfinished.iterdir())


@contextmanager
def claimed(workdir: Workdir) -> Iterator[None]:
    """Hold the run's folder against any other run.

    Raises
    ------
    InputError
        Another run holds it, or the folder cannot be made.
    """
    lock = FileLock(str(workdir.unfinished) + ".lock", timeout=0)
    try:
        workdir.final.parent.mkdir(parents=True, exist_ok=True)
        workdir.unfinished.mkdir(exist_ok=True)
        lock.acquire()
    except Timeout as error:
        raise InputError(
            f"{workdir.unfinished}: another run is working in this folder; wait for it or name "
            "another output.folder"
        ) from error
    except OSError as error:
        raise InputError(
            f"{workdir.final}: cannot be written ({error.strerror or error}); name another "
            "output.folder"
        ) from error
    try:
        yield
    finally:
        # Unlinked while held, so that no other run can hold a name that is about to go.
        Path(lock.lock_file).unlink(missing_ok=True)
        lock.release()


def fresh(workdir: Workdir) -> None:
    """Empty the unfinished folder and lay out its rooms."""
    durable.remove_tree(workdir.unfinished)
    for folder in ("work/tiles", "work/records", "layers"):
        (workdir.unfinished / folder).mkdir(parents=True)


def _record_file(work: Path, index: int) -> Path:
    return work / "records" / f"{index:06d}.json"


def write_tile(
    work: Path,
    index: int,
    window: Window,
    counts: dict[str, int],
    sections: dict[str, bytes],
    numbers: dict[str, NDArray[np.generic]],
) -> None:
    """Make one tile durable: its file first, then the small record that says it is whole."""
    buffer = io.BytesIO()
    np.savez(buffer, **numbers)  # type: ignore[arg-type]
    parts = sections | {"numbers": buffer.getvalue()}
    places, start = {}, 0
    for name, part in parts.items():
        places[name] = (start, len(part))
        start += len(part)
    durable.write_whole(tile_file(work, index), parts.values())
    record = Record(index, (window.row, window.col, window.height, window.width), counts, places)
    durable.write_json(_record_file(work, index), asdict(record))


def read_record(work: Path, index: int) -> Record:
    """The record of a finished tile."""
    raw = durable.read_json(_record_file(work, index))
    return Record(
        raw["index"],
        tuple(raw["window"]),
        raw["counts"],
        {name: (start, size) for name, (start, size) in raw["sections"].items()},
    )


def section(layer: str, level: int) -> str:
    """Name of the part that holds a layer at an overview level (0: full resolution)."""
    return f"{layer}@{level}" if level else layer


def tile_file(work: Path, index: int) -> Path:
    """File of a tile."""
    return work / "tiles" / f"{index:06d}.bin"


def section_path(work: Path, record: Record, name: str) -> str:
    """A part of a tile's file as a path GDAL opens."""
    start, size = record.sections[name]
    return f"/vsisubfile/{start}_{size},{tile_file(work, record.index)}"


def read_numbers(work: Path, record: Record, prefix: str) -> dict[str, NDArray[np.generic]]:
    """The arrays a tile kept under a prefix (such as "zonal."), by the rest of their names."""
    start, size = record.sections["numbers"]
    part = durable.read_slice(tile_file(work, record.index), start, size)
    with np.load(io.BytesIO(part)) as archive:
        names = [name for name in archive.files if name.startswith(prefix)]
        return {name.removeprefix(prefix): archive[name] for name in names}


def finish(workdir: Workdir) -> None:
    """Turn the whole unfinished run into the finished folder, replacing an older run."""
    durable.remove_tree(workdir.work)
    durable.sync_folder(workdir.unfinished)
    durable.step("work removed")
    old = workdir.final.with_name(workdir.final.name + ".replaced")
    durable.remove_tree(old)
    if workdir.final.exists():
        workdir.final.rename(old)
    workdir.unfinished.rename(workdir.final)
    durable.sync_folder(workdir.final.parent)
    durable.step("finished")
    durable.remove_tree(old)
