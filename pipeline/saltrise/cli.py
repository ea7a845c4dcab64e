"""The command line: a thin shell over functions of the same names."""

from __future__ import annotations

import signal
import sys
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING

import click

from saltrise import console
from saltrise.errors import InputError, SaltriseError

if TYPE_CHECKING:
    from saltrise.settings import Settings

INTERRUPTED, TERMINATED = 130, 143

_RESUME = "the unfinished run is kept beside the output folder; run the same command again"


class _Terminated(BaseException):
    """SIGTERM arrived."""


def _terminate(_signal: int, _frame: FrameType | None) -> None:
    raise _Terminated


def main() -> None:
    """Entry point: run a command and turn its outcome into an exit code."""
    signal.signal(signal.SIGTERM, _terminate)
    try:
        code = commands.main(standalone_mode=False)
    except click.ClickException as error:
        error.show()
        code = error.exit_code
    except BaseException as error:
        code, faults = _outcome(error)
        console.print_faults(faults)
    sys.exit(code or 0)


def _outcome(error: BaseException) -> tuple[int, tuple[str, ...]]:
    """Exit code of an error that a user is meant to read, and its lines; others go on."""
    if isinstance(error, InputError):
        return error.exit_code, error.faults
    if isinstance(error, SaltriseError):
        return error.exit_code, (str(error),)
    if isinstance(error, KeyboardInterrupt | click.Abort):
        return INTERRUPTED, (f"interrupted; {_RESUME}",)
    if isinstance(error, _Terminated):
        return TERMINATED, (f"terminated; {_RESUME}",)
    if isinstance(error, MemoryError):
        return 1, ("out of memory; use a smaller run.tile or fewer run.workers",)
    raise error


def _version(context: click.Context, _parameter: click.Parameter, wanted: bool) -> None:
    if wanted and not context.resilient_parsing:
        from importlib.metadata import version

        console.print_text(f"saltrise {version('saltrise')}")
        context.exit()


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.option(
    "--version",
    is_flag=True,
    expose_value=False,
    is_eager=True,
    callback=_version,
    help="Print the version and exit.",
)
def commands() -> None:
    """Map how much salt shallow groundwater brings to the land surface.

    A region is one TOML file; a run turns it into GeoTIFF hazard layers and zone tables.
    """


_config = click.argument("config", type=click.Path(path_type=Path))
_quiet = click.option("-q", "--quiet", is_flag=True, help="Print errors only.")
_verbose = click.option("-v", "--verbose", is_flag=True, help="Print more of what is done.")
_workers = click.option("--workers", type=click.IntRange(min=1), help="Overrides run.workers.")


_scheduler = click.option(
    "--scheduler",
    metavar="WHERE",
    help="Overrides run.scheduler: threads, processes or tcp://host:port of a dask scheduler.",
)


@commands.command()
@_config
@click.option(
    "--force",
    is_flag=True,
    help="Replace a finished run in the output folder, discard an unfinished one that differs.",
)
@_workers
@_scheduler
@click.option(
    "--log", type=click.Path(path_type=Path), help="Write progress to this file as JSON lines."
)
@_quiet
@_verbose
def run(
    config: Path,
    force: bool,
    workers: int | None,
    scheduler: str | None,
    log: Path | None,
    quiet: bool,
    verbose: bool,
) -> None:
    """Compute the layers and zone tables of a region, or go on where a run was cut short."""
    from saltrise.io.log import LogFile
    from saltrise.job import run as run_region

    file = LogFile(log) if log else None
    progress = None if quiet else console.Progress()
    ears = console.Ears([ear for ear in (progress, file) if ear])
    try:
        settings = _settings(config, workers, scheduler)
        result = run_region(settings, force=force, listener=ears)
    except BaseException as error:
        if file:
            code, faults = _outcome(error)
            file.end(code, "\n".join(faults))
        raise
    finally:
        if progress:
            progress.close()
    if file:
        file.end(0, str(result.folder))
    if not quiet:
        console.print_summary(result)
    if verbose:
        console.print_details(result)


@commands.command()
@_config
@_workers
@_quiet
@_verbose
def check(config: Path, workers: int | None, quiet: bool, verbose: bool) -> None:
    """Survey every input of a region and say what a run would cost; write nothing."""
    from saltrise.job import check_output, doubts, price, survey

    settings = _settings(config, workers, None)
    progress = None if quiet else console.Progress()
    try:
        region = survey(settings, console.Ears([progress] if progress else []))
    finally:
        if progress:
            progress.close()
    if not quiet:
        console.print_survey(region, doubts(region), price(region), check_output(settings))
    if verbose:
        console.print_files(region)


@commands.command()
@_config
@click.option("--at", type=float, nargs=2, metavar="X Y", help="The point to explain.")
@click.option(
    "--points",
    type=click.Path(path_type=Path),
    help="A CSV with columns x and y, to explain each of its points.",
)
@click.option("--crs", help="CRS of the points, such as EPSG:4326; the grid's own unless given.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a point.")
def explain(
    config: Path,
    at: tuple[float, float] | None,
    points: Path | None,
    crs: str | None,
    as_json: bool,
) -> None:
    """Show one cell's whole calculation with units and sources."""
    from saltrise.explain import Explainer
    from saltrise.explain_text import describe
    from saltrise.io.tables import read_points

    if (at is None) == (points is None):
        raise click.UsageError("give either --at X Y or --points FILE")
    region = Explainer(config)
    for x, y in read_points(points) if points else [at] if at else []:
        answer = region.at(x, y, crs)
        if as_json:
            console.print_json(answer)
        else:
            console.print_text(describe(answer))


@commands.command()
@click.argument("first", type=click.Path(path_type=Path))
@click.argument("second", type=click.Path(path_type=Path))
@click.option("--out", type=click.Path(path_type=Path), required=True, help="New folder to write.")
@click.option(
    "--depth-error",
    type=click.FloatRange(min=0.0),
    default=0.0,
    metavar="M",
    help="Depths [m] that differ by no more count as unchanged.",
)
def diff(first: Path, second: Path, out: Path, depth_error: float) -> None:
    """Compare two finished runs of one grid: the SECOND folder minus the FIRST."""
    from saltrise.compare import compare

    console.print_change(compare(first, second, out, depth_error))


@commands.command()
@click.argument("sets", nargs=-1)
@click.option(
    "--compare", is_flag=True, help="Show every class under every set side by side, in mm/day."
)
@click.option(
    "--depth",
    type=click.FloatRange(min=0.001, max=30.0),
    default=1.5,
    show_default=True,
    help="Depth to water table [m] to compare at.",
)
def soils(sets: tuple[str, ...], compare: bool, depth: float) -> None:
    """List soil parameter sets (all shipped ones, or SETS by name or CSV path)."""
    from saltrise.engine.listing import compare_soils, list_soils

    if compare:
        console.print_comparison(*compare_soils(sets, depth), depth)
    else:
        console.print_soils(*list_soils(sets))


@commands.command()
def template() -> None:
    """Print a commented config to start from."""
    from importlib import resources

    file = resources.files("saltrise") / "data" / "template.toml"
    console.print_text(file.read_text("utf-8"))


def _settings(config: Path, workers: int | None, scheduler: str | None) -> Settings:
    from saltrise.engine.config import read_settings

    return read_settings(config).with_run(workers=workers, scheduler=scheduler)
