"""Inputs over HTTP: read by blocks, asked again when a server stumbles, told when it is gone."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

import regions
import runs
from runs import data, make_region, run_small
from saltrise.errors import InputError
from saltrise.io.fingerprint import PART, WHOLE, fingerprint, stamp


@pytest.fixture
def address(tmp_path: Path) -> Iterator[str]:
    """Address under which `tmp_path` is served."""
    script = Path(__file__).with_name("range_server.py")
    with subprocess.Popen(
        [sys.executable, str(script), str(tmp_path)], stdout=subprocess.PIPE, text=True
    ) as process:
        assert process.stdout is not None
        yield f"http://127.0.0.1:{process.stdout.readline().strip()}"
        process.kill()


@pytest.fixture(autouse=True)
def _fixed_date(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", runs.DATE)


def far(config: Path, address: str, *names: str) -> Path:
    """The config with some of its inputs at the server's address."""
    text = config.read_text()
    for name in names or ("depth", "texture", "salinity", "demand"):
        text = text.replace(f'"{name}.tif"', f'"{address}/{name}.tif"')
    target = config.with_name("far.toml")
    target.write_text(text.replace("/out", "/far"))
    return target


def test_remote_inputs_give_the_same_layers(tmp_path: Path, address: str) -> None:
    config = make_region(tmp_path)
    near = run_small(config)
    result = run_small(far(config, address))
    assert data(result.folder) == data(near.folder)
    entry = next(e for e in result.record["inputs"] if "depth" in e["file"])
    assert entry["file"] == f"{address}/depth.tif"
    assert entry["covers"] == PART
    assert entry["size_bytes"] == (tmp_path / "depth.tif").stat().st_size
    local = next(e for e in near.record["inputs"] if "depth" in e["file"])
    assert local["covers"] == WHOLE


def test_a_small_cut_of_a_large_remote_file_is_read_by_blocks(tmp_path: Path, address: str) -> None:
    config = make_region(tmp_path)
    random = np.random.default_rng(1)
    large = random.uniform(0.5, 20, (3000, 3000)).astype(np.float32)
    options = {"tiled": True, "blockxsize": 256, "blockysize": 256, "nodata": -9999}
    regions.write_raster(tmp_path / "salinity.tif", large, **options)
    result = run_small(far(config, address, "salinity"))
    assert not result.layer("salt_load")[0].mask.all()
    # 70 x 80 cells lie in one block of 144.
    sent = sum(map(int, (tmp_path / "sent").read_text().split()))
    assert sent < large.nbytes / 10


def test_a_server_that_stumbles_is_asked_again(tmp_path: Path, address: str) -> None:
    config = make_region(tmp_path)
    near = data(run_small(config).folder)
    (tmp_path / "fail_next").write_text("2")
    done = runs.child(far(config, address, "salinity"))
    assert done.returncode == 0, done.stderr
    assert (tmp_path / "fail_next").read_text() == "0"
    assert data(tmp_path / "far") == near


def test_a_server_that_fails_under_way_is_a_clear_resumable_error(
    tmp_path: Path, address: str
) -> None:
    config = make_region(tmp_path)
    near = data(run_small(config).folder)
    # Larger than one request, so that tiles have to ask again.
    random = np.random.default_rng(1)
    large = random.uniform(0.5, 20, (70, 60_000)).astype(np.float32)
    salinity = regions.fields((70, 80), np.random.default_rng(5))["salinity"]
    large[:, :80] = salinity
    options = {"tiled": True, "blockxsize": 16, "blockysize": 16, "nodata": -9999}
    regions.write_raster(tmp_path / "salinity.tif", large, **options)
    setup = (
        "def tell(name):\n"
        "    if name == 'survey.pickle':\n"
        "        from pathlib import Path\n"
        f"        Path({str(tmp_path / 'fail')!r}).touch()\n"
        "durable.observers.append(tell)\n"
        "os.environ['GDAL_HTTP_MAX_RETRY'] = '1'\n"
        "os.environ['GDAL_HTTP_RETRY_DELAY'] = '0.05'\n"
        "os.environ['VSI_CACHE'] = 'FALSE'\n"
        "os.environ['CPL_VSIL_CURL_CACHE_SIZE'] = '16384'\n"
        "os.environ['CPL_VSIL_CURL_CHUNK_SIZE'] = '16384'\n"
    )
    ended = runs.child(far(config, address, "salinity"), setup)
    assert ended.returncode == 1, ended.stderr
    assert "salinity.tif" in ended.stderr
    assert "run the same command again" in ended.stderr
    assert "Traceback" not in ended.stderr
    (tmp_path / "fail").unlink()
    again = runs.child(tmp_path / "far.toml")
    assert again.returncode == 0, again.stderr
    assert data(tmp_path / "far") == near


def test_a_remote_file_that_is_not_there(tmp_path: Path, address: str) -> None:
    config = make_region(tmp_path)
    (tmp_path / "salinity.tif").unlink()
    with pytest.raises(InputError, match=r"groundwater\.salinity: .*salinity\.tif"):
        run_small(far(config, address, "salinity"))
    assert not (tmp_path / "far.unfinished").exists()


def test_a_change_on_the_server_shows_in_stamp_and_fingerprint(
    tmp_path: Path, address: str
) -> None:
    make_region(tmp_path)
    path = f"/vsicurl/{address}/salinity.tif"
    before = stamp(path)
    assert any(mark.startswith("ETag=") for mark in before)
    assert stamp(path) == before
    assert fingerprint(path, (0, 0, 80, 70)).covers == PART
    values = regions.fields((70, 80), np.random.default_rng(77))
    regions.write_raster(tmp_path / "salinity.tif", values["salinity"], nodata=-9999)
    assert stamp(path) != before


def test_inputs_inside_an_archive(tmp_path: Path) -> None:
    import zipfile

    config = make_region(tmp_path)
    near = data(run_small(config).folder)
    with zipfile.ZipFile(tmp_path / "inputs.zip", "w") as archive:
        archive.write(tmp_path / "salinity.tif", "salinity.tif")
    inside = f"/vsizip/{tmp_path / 'inputs.zip'}/salinity.tif"
    text = config.read_text().replace('"salinity.tif"', f'"{inside}"')
    config.with_name("far.toml").write_text(text.replace("/out", "/far"))
    assert data(run_small(tmp_path / "far.toml").folder) == near
