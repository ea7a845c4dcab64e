"""One run from config to finished folder: survey, tiles, merge, assemble, hand over."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from datetime import datetime
from pathlib import Path
from typing import Any, Protocol

from saltrise.engine import findings
from saltrise.engine.account import layer_tags, run_date, run_record, run_warnings
from saltrise.engine.assemble import assemble
from saltrise.engine.config import read_settings
from saltrise.engine.estimate import Estimate, estimate_cost, require_room
from saltrise.engine.handover import hand_over
from saltrise.engine.identity import digest, identify, versions
from saltrise.engine.merge import Totals, merge
from saltrise.engine.pictures import Finished
from saltrise.engine.plan import Plan
from saltrise.engine.prints import Prints, take_prints
from saltrise.engine.records import Record, is_done, read_record
from saltrise.engine.region import Opened, Region, make_plan, open_region, survey_region
from saltrise.engine.schedule import on_threads, run_tiles
from saltrise.engine.workdir import (
    FINISHED,
    Beginning,
    Workdir,
    begin,
    check_target,
    claimed,
    discard,
    finish,
    tidy,
)
from saltrise.errors import (
    BrokenInputError,
    InputError,
    RunError,
    SaltriseError,
    UnusableInputError,
)
from saltrise.io import durable
from saltrise.io.fingerprint import code_print
from saltrise.io.geopackage import write_zones_gpkg
from saltrise.io.tables import write_csv
from saltrise.result import Result
from saltrise.settings import Settings
from saltrise.zone_table import zone_table

_SURVEY = "survey.pickle"
_WORST = 5


class Listener(Protocol):
    """Hears how far a run is."""

    def stage(self, name: str, total: int, cells: int = 0, done: int = 0) -> None:
        """A stage of `total` steps begins, `done` of them by an earlier run; of `cells` cells."""

    def advance(self) -> None:
        """One step of the stage is done."""


class Silent:
    """A listener that says nothing."""

    def stage(self, name: str, total: int, cells: int = 0, done: int = 0) -> None:
        """Ignore."""

    def advance(self) -> None:
        """Ignore."""


def run(
    region: str | Path | Settings | Mapping[str, Any],
    *,
    force: bool = False,
    listener: Listener | None = None,
    block: int = 512,
) -> Result:
    """Run a region, or go on with a run of it that was cut short, and return the finished folder.

    Parameters
    ----------
    region : path, Settings or mapping
        A TOML file, or the same content as settings or nested dict (paths relative to the
        working directory).
    force : bool
        Replace a finished run in the output folder once the new one is whole; discard an
        unfinished one that differs.
    listener : Listener, optional
        Hears of progress.
    block : int
        Edge of the unit of arithmetic [cells]; outputs have 512, tests use less.

    Raises
    ------
    InputError
        Config or inputs have to be mended; nothing that looks finished is left.
    RunError
        A file broke or could not be written while the run was under way; the same call goes on
        where it stopped.
    """
    settings = read_settings(region)
    ears = listener or Silent()
    workdir = Workdir(settings.output_folder)
    tidy(workdir)
    check_target(workdir, force=force)
    with claimed(workdir):
        check_target(workdir, force=force)
        opened = open_region(settings, block)
        prints = _prints(opened, ears)
        cut: dict[str, int | str] = {
            "tile": settings.run.tile,
            "block": block,
            "code": code_print(),
            "grid": opened.inputs.grid.place(),
        }
        entries = prints.entries(settings.shown)
        identity = identify(settings.resolved(), entries, versions(), cut)
        beginning = begin(workdir, identity, run_date(), force=force)
        if not beginning.whole:
            try:
                _work(workdir, opened, prints, beginning, identity, ears)
            except InputError:
                if not beginning.resumed:
                    # What has to change makes another run of it; nothing here is of use to that.
                    discard(workdir)
                raise
            except UnusableInputError as error:
                raise _settled(error, workdir, opened, prints, ears) from error
        finish(workdir)
    return Result(workdir.final)


def _work(
    workdir: Workdir,
    opened: Opened,
    prints: Prints,
    beginning: Beginning,
    identity: dict[str, Any],
    ears: Listener,
) -> None:
    """From an opened region to a whole unfinished folder, run.json included."""
    region = _surveyed(workdir, opened, ears)
    plan = make_plan(region, workdir.work, digest(identity))
    _tiles(plan, region.settings, ears)
    records = [read_record(plan.work, index) for index in range(len(plan.tiles()))]
    totals = merge(plan.work, records, plan.layers)
    tags = layer_tags(region, identity["inputs"], beginning.date)
    _assemble(plan, region, records, totals, tags, workdir, ears)
    extras = plan.recipe.extra_sums
    table = _zones(region, totals, beginning.date, workdir, extras)
    doubts = run_warnings(region, totals, table)
    finished = Finished(
        region, plan, totals, table, tuple(doubts), beginning.date, workdir.unfinished
    )
    hand_over(finished)
    _require_unchanged(prints)
    worst = _worst(table)
    record = run_record(region, totals, identity["inputs"], beginning.date, worst, doubts, extras)
    durable.write_json(workdir.unfinished / FINISHED, record)


def survey(settings: Settings, listener: Listener, block: int = 512) -> Region:
    """Look at every cell of every input of a region; write nothing."""
    opened = open_region(settings, block)
    return survey_region(opened, _steps("survey", listener), None, whole=True)


def doubts(region: Region) -> list[str]:
    """What the ranges of a surveyed region's inputs make doubtful."""
    return findings.warnings(region.settings, region.found.ranges)


def price(region: Region) -> Estimate:
    """What a run of a surveyed region would cost, from a sample of it."""
    plan = make_plan(region, Workdir(region.settings.output_folder).work, "")
    return estimate_cost(plan, region.settings.workers)


def check_output(settings: Settings) -> str:
    """Why a run could not use its output folder without `--force` or at all; empty if it can."""
    try:
        check_target(Workdir(settings.output_folder), force=False)
    except InputError as error:
        return str(error)
    return ""


def _steps(stage: str, ears: Listener) -> Callable[[int, int], None]:
    """A callback (steps done, steps in all) that announces its stage when the first is done."""
    started = False

    def done(_: int, total: int) -> None:
        nonlocal started
        if not started:
            ears.stage(stage, total)
            started = True
        ears.advance()

    return done


def _prints(opened: Opened, ears: Listener) -> Prints:
    try:
        return take_prints(opened, _steps("fingerprints", ears))
    except UnusableInputError as error:
        raise InputError(str(error)) from error


def _surveyed(workdir: Workdir, opened: Opened, ears: Listener) -> Region:
    """The region, by an earlier survey of the same run if there is one."""
    kept = workdir.work / _SURVEY
    found = durable.read_pickle(kept) if kept.exists() else None
    region = survey_region(opened, _steps("survey", ears), found, whole=False)
    if found is None:
        durable.write_pickle(kept, region.found)
    return region


def _settled(
    error: UnusableInputError, workdir: Workdir, opened: Opened, prints: Prints, ears: Listener
) -> SaltriseError:
    """What an input that broke under way means: it changed, or the user has to mend it."""
    try:
        _require_unchanged(prints)
        if isinstance(error, BrokenInputError) and prints.remote():
            return RunError(f"{error}; finished tiles are kept, run the same command again")
        survey_region(opened, _steps("survey", ears), None, whole=True)
    except InputError as faults:
        if not prints.changed():
            discard(workdir)
            return faults
    except RunError as changed:
        return RunError(f"{error}; {changed}")
    return error


def _require_unchanged(prints: Prints) -> None:
    changed = prints.changed()
    if changed:
        raise RunError(
            f"{', '.join(changed[:3])}: was changed or removed while the run was under way; put "
            "it back as it was and run the same command again, or start over with --force"
        )


def _tiles(plan: Plan, settings: Settings, ears: Listener) -> None:
    indices = range(len(plan.tiles()))
    missing = [index for index in indices if not is_done(plan.work, plan.run, index)]
    if missing:
        require_room(plan, settings.workers)
    done = len(indices) - len(missing)
    ears.stage("tiles", len(indices), plan.grid.width * plan.grid.height, done)
    run_tiles(plan, missing, settings.run.scheduler, settings.workers, lambda _: ears.advance())


def _assemble(
    plan: Plan,
    region: Region,
    records: list[Record],
    totals: Totals,
    tags: dict[str, str],
    workdir: Workdir,
    ears: Listener,
) -> None:
    """Assemble the layers that are not there yet: a layer's file appears whole or not at all."""
    folder = workdir.unfinished / "layers"
    missing = [name for name in plan.layers if not (folder / f"{name}.tif").exists()]
    ears.stage("layers", len(plan.layers), 0, len(plan.layers) - len(missing))
    workers = region.settings.workers

    def one(name: str) -> None:
        target = folder / f"{name}.tif"
        assemble(plan, records, name, totals.statistics.get(name), tags, target, 1)

    on_threads(one, missing, workers, lambda _: ears.advance())


def _zones(
    region: Region, totals: Totals, date: datetime, workdir: Workdir, extras: Sequence[str]
) -> dict[str, list[Any]]:
    """Write the zone tables and return their columns; none without zones."""
    zones = region.zones
    if zones is None:
        return {}
    table = zone_table(
        totals.zones,
        zones.ids,
        zones.names,
        zones.area_m2,
        zones.outside_m2,
        region.settings.hazard.rank_by,
        extras,
        zones.supply_mm_per_year,
    )
    write_csv(workdir.unfinished / "zones.csv", table)
    write_zones_gpkg(workdir.unfinished / "zones.gpkg", zones, table, date)
    return table


def _worst(table: dict[str, list[Any]]) -> list[dict[str, Any]]:
    """The worst zones for the record."""
    if not table:
        return []
    ranked = sorted(
        (row for row, rank in enumerate(table["rank"]) if rank is not None),
        key=lambda row: table["rank"][row],
    )
    shown = (
        "zone_id",
        "name",
        "rank",
        "salt_load_mean_t_per_ha_per_year",
        "salt_load_t_per_year",
        "too_shallow_ha",
        "assessed_share",
    )
    return [{column: table[column][row] for column in shown} for row in ranked[:_WORST]]
