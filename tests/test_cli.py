"""The command line as a user meets it: a process of its own, its exit codes and streams."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from shapely.geometry import box

import regions

PROGRAM = [sys.executable, "-c", "from saltrise.cli import main; main()"]


def call(*arguments: object, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [*PROGRAM, *map(str, arguments)], capture_output=True, text=True, cwd=cwd, check=False
    )


@pytest.fixture(scope="module")
def region(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("cli")
    regions.write_zones(
        folder / "zones.gpkg",
        {"A1": box(regions.WEST, regions.NORTH - 600, regions.WEST + 900, regions.NORTH)},
    )
    return regions.small_region(folder, zones={"file": "zones.gpkg"})


def test_run_prints_a_summary_and_exits_0(region: Path) -> None:
    done = call("run", region, "--force")
    assert done.returncode == 0, done.stderr
    for words in (
        "very high",
        "t/year",
        "A1 Zone A1",
        "no depth to water table",
        "not soil",
        "limited by evaporative demand",
        "field sampling",
        "Written to",
        "rawls1982",
    ):
        assert words in done.stdout
    assert "tiles: 1/1" in done.stderr


def test_quiet_prints_nothing_and_verbose_more(region: Path) -> None:
    quiet = call("run", region, "--force", "-q")
    assert (quiet.returncode, quiet.stdout, quiet.stderr) == (0, "", "")
    verbose = call("run", region, "--force", "-v")
    assert "water_table.depth: cell for cell" in verbose.stdout
    assert "Rawls et al. 1982" in verbose.stdout


def test_a_finished_run_is_kept_without_force(region: Path) -> None:
    call("run", region, "--force", "-q")
    record = region.parent / "out" / "run.json"
    before = record.stat().st_mtime_ns
    done = call("run", region)
    assert done.returncode == 2
    assert "--force" in done.stderr
    assert record.stat().st_mtime_ns == before


def test_check_surveys_and_writes_nothing(tmp_path: Path) -> None:
    config = regions.small_region(tmp_path)
    before = sorted(p.name for p in tmp_path.iterdir())
    done = call("check", config)
    assert done.returncode == 0, done.stderr
    for words in (
        "50 x 40 = 2,000 cells of 30 x 30 metre",
        "cell for cell",
        "code 1 = sand",
        "Soil profiles: 4",
        "GB memory",
        "tiles",
    ):
        assert words in done.stdout
    assert sorted(p.name for p in tmp_path.iterdir()) == before


def test_soils_lists_sets_with_sources_and_depths() -> None:
    done = call("soils")
    assert done.returncode == 0
    for words in ("rawls1982", "clapp-hornberger1978-arithmetic", "1 mm/day at", "Table 2"):
        assert words in done.stdout
    rows = done.stdout.split("rawls1982")[1].splitlines()
    loam = next(row for row in rows if row.strip().startswith("loam "))
    # Rawls 1982 loam: 124.01 cm for 1 mm/day, by quadrature.
    assert "1.24" in loam


def test_soils_of_a_csv_and_of_nothing_known(tmp_path: Path) -> None:
    (tmp_path / "mine.csv").write_text(
        "texture,air_entry_cm,b,ks_cm_per_day,source\nsilt,20,5,10,my laboratory\n"
    )
    assert "my laboratory" in call("soils", "mine.csv", cwd=tmp_path).stdout
    assert call("soils", "nothing").returncode == 2


def test_soils_side_by_side() -> None:
    done = call("soils", "--compare", "--depth", "1.5")
    assert done.returncode == 0
    head, *rows = done.stdout.splitlines()[1:]
    sets = head.split()[1:]
    loam = next(row.split() for row in rows if row.startswith("loam "))
    rates = dict(zip(sets, map(float, loam[1:]), strict=True))
    # By quadrature outside this project, mm/day.
    assert rates["rawls1982"] == pytest.approx(0.603, abs=5e-4)
    assert rates["clapp-hornberger1978"] == pytest.approx(3.07, abs=5e-3)
    assert rates["clapp-hornberger1978-arithmetic"] == pytest.approx(60.4, abs=0.05)
    assert rates["carsel-parrish1988"] == pytest.approx(0.152, abs=5e-4)
    silt = next(row for row in rows if row.startswith("silt  "))
    assert "no row" in silt
    assert call("soils", "--compare", "--depth", "-1").returncode == 2


def test_the_template_is_a_config(tmp_path: Path) -> None:
    done = call("template")
    assert done.returncode == 0
    (tmp_path / "mine.toml").write_text(done.stdout)
    faults = call("check", "mine.toml", cwd=tmp_path).stderr
    assert "water_table.depth: no file matches the pattern" in faults
    assert "Traceback" not in faults


def test_version_and_help() -> None:
    assert call("--version").stdout.startswith("saltrise 0.")
    for command in ("run", "check", "explain", "soils", "template"):
        assert command in call("--help").stdout
        assert call(command, "--help").returncode == 0


def test_help_imports_no_heavy_library() -> None:
    script = (
        "import sys, saltrise.cli\n"
        "try: saltrise.cli.main()\n"
        "except SystemExit: pass\n"
        "heavy = {'rasterio', 'geopandas', 'dask', 'scipy', 'numpy', 'pydantic', 'shapely'}\n"
        "print(sorted(heavy & set(sys.modules)), file=sys.stderr)\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", script, "--help"], capture_output=True, text=True, check=True
    )
    assert done.stderr.strip() == "[]"


@pytest.mark.parametrize("arguments", [["nothing"], ["run"], ["run", "--nothing", "x.toml"]])
def test_a_wrong_call_exits_2_without_traceback(arguments: list[str]) -> None:
    done = call(*arguments)
    assert done.returncode == 2
    assert "Traceback" not in done.stderr


def test_a_missing_config_exits_2() -> None:
    done = call("run", "gone.toml")
    assert (done.returncode, done.stderr.strip()) == (2, "saltrise: gone.toml: no such file")


@pytest.mark.parametrize(
    ("sent", "code", "word"),
    [(signal.SIGINT, 130, "interrupted"), (signal.SIGTERM, 143, "terminated")],
)
def test_a_signal_ends_the_run_soon_and_says_how_to_go_on(tmp_path, sent, code, word) -> None:
    config = regions.small_region(tmp_path, (3000, 3000))
    process = subprocess.Popen(
        [*PROGRAM, "run", str(config)], stderr=subprocess.PIPE, text=True, stdout=subprocess.PIPE
    )
    records = tmp_path / "out.unfinished" / "work" / "records"
    deadline = time.monotonic() + 60
    while time.monotonic() < deadline and not (records.is_dir() and any(records.iterdir())):
        time.sleep(0.02)
    os.kill(process.pid, sent)
    _, errors = process.communicate(timeout=20)
    assert process.returncode == code, errors
    assert word in errors
    assert "run the same command again" in errors
    assert "Traceback" not in errors
    assert not (tmp_path / "out").exists()


def test_the_log_tells_stages_steps_and_the_end(region: Path, tmp_path: Path) -> None:
    log = tmp_path / "run.jsonl"
    done = call("run", str(region), "--force", "-q", "--log", str(log))
    assert done.returncode == 0
    lines = [json.loads(line) for line in log.read_text().splitlines()]
    assert all(line["time"].endswith("+00:00") for line in lines)
    stages = [line["stage"] for line in lines if line["event"] == "stage"]
    assert stages == ["fingerprints", "survey", "tiles", "layers"]
    tiles = [line for line in lines if line["event"] == "step" and line["stage"] == "tiles"]
    assert tiles[-1]["done"] == tiles[-1]["total"] == len(tiles)
    assert tiles[-1]["cells_per_second"] > 0
    assert lines[-1]["event"] == "end"
    assert lines[-1]["exit_code"] == 0
    # A second run goes on in the same file and tells why it failed.
    assert call("run", str(region), "-q", "--log", str(log)).returncode == 2
    last = json.loads(log.read_text().splitlines()[-1])
    assert last["exit_code"] == 2
    assert "holds a finished run" in last["message"]
    nowhere = call("run", str(region), "--log", str(tmp_path / "no" / "x.jsonl"))
    assert nowhere.returncode == 2
    assert "cannot be written" in nowhere.stderr


def test_numbers_of_workers_override_the_config(region: Path) -> None:
    assert call("run", region, "--force", "--workers", 2, "-q").returncode == 0
    assert call("run", region, "--workers", 0).returncode == 2


def test_warnings_reach_the_summary(tmp_path: Path) -> None:
    values = regions.fields((20, 20), np.random.default_rng(0))
    regions.write_fields(tmp_path, values)
    regions.write_raster(tmp_path / "texture.tif", values["texture"])
    done = call("run", regions.write_config(tmp_path, regions.tables(tmp_path)))
    assert "Warning: soil.texture: an integer raster without declared nodata" in done.stdout
