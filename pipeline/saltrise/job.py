"""One run from config to finished folder: survey, tiles, merge, assemble, hand over."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from pathlib import Path
from typing import Any, Protocol

from saltrise.engine.account import layer_tags, run_date, run_record
from saltrise.engine.assemble import assemble
from saltrise.engine.config import read_settings
from saltrise.engine.inputs import ROLES
from saltrise.engine.merge import Totals, merge
from saltrise.engine.plan import Plan
from saltrise.engine.region import Region, make_plan, survey_region
from saltrise.engine.schedule import on_threads, run_tiles
from saltrise.engine.workdir import (
    FINISHED,
    Record,
    Workdir,
    check_target,
    claimed,
    finish,
    fresh,
    read_record,
)
from saltrise.errors import InputError
from saltrise.io import durable
from saltrise.io.fingerprint import Fingerprint, fingerprint
from saltrise.io.tables import write_zones_csv
from saltrise.io.vectors import write_zones_gpkg
from saltrise.result import Result
from saltrise.settings import Settings
from saltrise.zone_table import zone_table

_WORST = 5


class Listener(Protocol):
    """Hears how far a run is."""

    def stage(self, name: str, total: int, cells: int = 0) -> None:
        """A stage of `total` steps begins; together they treat `cells` cells."""

    def advance(self) -> None:
        """One step of the stage is done."""


class Silent:
    """A listener that says nothing."""

    def stage(self, name: str, total: int, cells: int = 0) -> None:
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
    """Run a region and return the finished folder.

    Parameters
    ----------
    region : path, Settings or mapping
        A TOML file, or the same content as settings or nested dict (paths relative to the
        working directory).
    force : bool
        Replace a finished run in the output folder once the new one is whole.
    listener : Listener, optional
        Hears of progress.
    block : int
        Edge of the unit of arithmetic [cells]; outputs have 512, tests use less.

    Raises
    ------
    InputError
        Config or inputs have to be mended; nothing that looks finished is left.
    RunError
        A file broke or could not be written while the run was under way.
    """
    settings = read_settings(region)
    ears = listener or Silent()
    workdir = Workdir(settings.output_folder)
    check_target(workdir.final, force=force)
    found = survey(settings, ears, block)
    with claimed(workdir):
        check_target(workdir.final, force=force)
        fresh(workdir)
        date = run_date()
        plan = make_plan(found, workdir)
        _tiles(plan, settings, ears)
        records = [read_record(plan.work, index) for index in range(len(plan.tiles()))]
        totals = merge(plan.work, records, plan.layers)
        _assemble(plan, found, records, totals, date, workdir, ears)
        worst = _zones(found, totals, date, workdir)
        prints = _fingerprints(found, ears)
        record = run_record(found, totals, prints, date, worst)
        durable.write_json(workdir.unfinished / FINISHED, record)
        finish(workdir)
    return Result(workdir.final)


def survey(settings: Settings, listener: Listener, block: int = 512) -> Region:
    """Look at every input of a region; write nothing."""
    listener.stage("survey", 0)
    started = False

    def done(_: int, total: int) -> None:
        nonlocal started
        if not started:
            listener.stage("survey", total)
            started = True
        listener.advance()

    return survey_region(settings, block, settings.workers, done)


def check_output(settings: Settings) -> str:
    """Why a run could not use its output folder without `--force` or at all; empty if it can."""
    try:
        check_target(settings.output_folder, force=False)
    except InputError as error:
        return str(error)
    return ""


def _tiles(plan: Plan, settings: Settings, ears: Listener) -> None:
    indices = list(range(len(plan.tiles())))
    ears.stage("tiles", len(indices), plan.grid.width * plan.grid.height)
    run_tiles(plan, indices, settings.run.scheduler, settings.workers, lambda _: ears.advance())


def _assemble(
    plan: Plan,
    region: Region,
    records: list[Record],
    totals: Totals,
    date: datetime,
    workdir: Workdir,
    ears: Listener,
) -> None:
    ears.stage("layers", len(plan.layers))
    tags = layer_tags(region, date)
    for name in plan.layers:
        target = workdir.unfinished / "layers" / f"{name}.tif"
        statistics = totals.statistics.get(name)
        assemble(plan, records, name, statistics, tags, target, region.settings.workers)
        ears.advance()


def _zones(
    region: Region, totals: Totals, date: datetime, workdir: Workdir
) -> list[dict[str, Any]]:
    """Write the zone tables; return the worst zones for the record."""
    zones = region.zones
    if zones is None:
        return []
    table = zone_table(
        totals.zones,
        zones.ids,
        zones.names,
        zones.area_m2,
        zones.outside_m2,
        region.settings.hazard.rank_by,
    )
    write_zones_csv(workdir.unfinished / "zones.csv", table)
    write_zones_gpkg(workdir.unfinished / "zones.gpkg", zones, table, date)
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


def _fingerprints(region: Region, ears: Listener) -> dict[str, Fingerprint]:
    """Fingerprint of every input file, by its path."""
    paths: dict[str, None] = {}
    for role in ROLES:
        if role in region.inputs.rasters:
            for tile in region.inputs.rasters[role].mosaic.tiles:
                paths[tile.file.path] = None
    if region.settings.zones is not None:
        paths[str(region.settings.zones_file)] = None
    names = list(paths)
    ears.stage("fingerprints", len(names))
    workers = region.settings.workers
    prints = on_threads(fingerprint, names, workers, lambda _: ears.advance())
    return {region.settings.shown(name): p for name, p in zip(names, prints, strict=True)}
