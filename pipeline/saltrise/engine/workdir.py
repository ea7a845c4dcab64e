"""The folder of a run: its lock, its beginning or resumption, and the rename that ends it.

A run into FOLDER works in `FOLDER.unfinished`, which becomes FOLDER by one rename when run.json,
written last, is in it. `work/started.json` says which run it is.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

from filelock import FileLock, Timeout

from saltrise.engine.identity import SHARED, differences
from saltrise.errors import InputError
from saltrise.io import durable

FINISHED = "run.json"
KNOWN = frozenset(
    {
        "layers",
        "styles",
        "maps",
        "zones.gpkg",
        "zones.csv",
        "zones_columns.csv",
        "depth_by_salinity.csv",
        "item.json",
        "report.html",
        FINISHED,
    }
)
"""What a finished run's folder may hold."""

_SHOWN = 8


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

    @property
    def replaced(self) -> Path:
        """Where an older run is for the moment between two renames."""
        return self.final.with_name(self.final.name + ".replaced")

    @property
    def started(self) -> Path:
        """Which run the unfinished folder holds."""
        return self.work / "started.json"


@dataclass(frozen=True)
class Beginning:
    """How a run begins: its date; whether it goes on with an older one; whether that is whole."""

    date: datetime
    resumed: bool
    whole: bool = False


def check_target(workdir: Workdir, *, force: bool) -> None:
    """Refuse a target folder that a run may not replace.

    Raises
    ------
    InputError
        The folder holds a finished run and `force` is not set, holds anything but a run, is a
        file, or its parent cannot be written.
    """
    final, unfinished = workdir.final, workdir.unfinished
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
    if unfinished.exists() and not (unfinished.is_dir() and _is_ours(unfinished)):
        raise InputError(f"{unfinished}: is no unfinished run of this tool; move it away")


def _is_ours(unfinished: Path) -> bool:
    ours = (unfinished / "work").is_dir() or (unfinished / FINISHED).is_file()
    return ours or not any(unfinished.iterdir())


@contextmanager
def claimed(workdir: Workdir) -> Iterator[None]:
    """Hold the run's folder against any other run; leave no trace of one that never began.

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
        if workdir.unfinished.is_dir() and not any(workdir.unfinished.iterdir()):
            workdir.unfinished.rmdir()
        # Unlinked while held, so that no other run can hold a name that is about to go.
        Path(lock.lock_file).unlink(missing_ok=True)
        lock.release()


def begin(
    workdir: Workdir, identity: Mapping[str, Any], date: datetime, *, force: bool
) -> Beginning:
    """Go on with the unfinished run in the folder if it is this one, else start afresh.

    Parameters
    ----------
    workdir : Workdir
        The claimed folder.
    identity : mapping
        What makes this run this run, see `engine.identity`.
    date : datetime
        The run's date if it starts now; a resumed run keeps its own.
    force : bool
        Discard an unfinished run that differs or was begun without it. An unfinished run begun
        with it is resumed, so that the same command always goes on where it was.

    Raises
    ------
    InputError
        The folder holds an unfinished run with other settings, inputs or software; names them.
    """
    held = _held(workdir)
    if held is not None:
        changed = differences(held["identity"], identity)
        if changed and not force:
            more = f" and {len(changed) - _SHOWN} more" if len(changed) > _SHOWN else ""
            raise InputError(
                f"{workdir.unfinished}: holds an unfinished run of something else: "
                f"{'; '.join(changed[:_SHOWN])}{more}. Put that back to resume it, or use --force "
                "to discard it and start over"
            )
        if not changed and (held["force"] or not force):
            for rest in workdir.unfinished.rglob("*.partial*"):
                rest.unlink(missing_ok=True)
            kept = datetime.fromisoformat(held["date"])
            return Beginning(kept, resumed=True, whole=held["whole"])
    durable.remove_tree(workdir.unfinished)
    for folder in ("work/tiles", "work/records", "layers"):
        (workdir.unfinished / folder).mkdir(parents=True)
    content = {"date": date.isoformat(), "force": force, "identity": identity}
    durable.write_json(workdir.started, content)
    return Beginning(date, resumed=False)


def _held(workdir: Workdir) -> dict[str, Any] | None:
    """Identity, date and state of the run in the unfinished folder, if there is one."""
    record = workdir.unfinished / FINISHED
    if record.is_file():
        # Whole, but not handed over: what is left of its work no longer matters.
        raw = durable.read_json(record)
        identity = {name: raw[name] for name in SHARED}
        return {"identity": identity, "date": raw["date"], "force": True, "whole": True}
    if workdir.started.is_file():
        held: dict[str, Any] = durable.read_json(workdir.started)
        return held | {"whole": False}
    return None


def discard(workdir: Workdir) -> None:
    """Give up an unfinished run of which nothing is of use."""
    durable.remove_tree(workdir.unfinished)


def finish(workdir: Workdir) -> None:
    """Turn the whole unfinished run into the finished folder, replacing an older run."""
    durable.remove_tree(workdir.work)
    durable.sync_folder(workdir.unfinished)
    durable.step("work removed")
    if workdir.final.exists():
        durable.remove_tree(workdir.replaced)
        workdir.final.rename(workdir.replaced)
        durable.step("older run moved")
    workdir.unfinished.rename(workdir.final)
    durable.sync_folder(workdir.final.parent)
    durable.step("finished")
    tidy(workdir)


def tidy(workdir: Workdir) -> None:
    """Remove an older run that a finished one has replaced."""
    if (workdir.final / FINISHED).is_file() and (workdir.replaced / FINISHED).is_file():
        durable.remove_tree(workdir.replaced)
