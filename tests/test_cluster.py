"""The same tasks on a running dask cluster: same bytes, lost workers, unfit clusters."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

import runs
from runs import hashes, make_region, run_small, small_tiles
from saltrise import job
from saltrise.engine import schedule
from saltrise.errors import InputError, RunError

pytestmark = [
    pytest.mark.filterwarnings("ignore::DeprecationWarning"),
    pytest.mark.filterwarnings("ignore:.*:UserWarning:distributed.*"),
    pytest.mark.filterwarnings("ignore::ResourceWarning"),
]


@pytest.fixture(scope="module")
def address() -> Iterator[str]:
    """A scheduler and two single-threaded workers in processes of their own."""
    distributed = pytest.importorskip("distributed", reason="needs the extra `cluster`")
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None
    ) as cluster:
        yield cluster.scheduler_address


@pytest.fixture(autouse=True)
def _fixed_date(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", runs.DATE)


def test_a_cluster_gives_the_same_bytes_as_threads(tmp_path: Path, address: str) -> None:
    config = make_region(tmp_path)
    threads = hashes(run_small(config).folder)
    assert hashes(run_small(config, force=True, scheduler=address).folder) == threads
    # Workers outlive a run: another one in the same folder must not get the old plan.
    config.write_text(config.read_text().replace("target_load = 2.0", "target_load = 9.0"))
    other = hashes(run_small(config, force=True, scheduler=address).folder)
    assert other["layers/critical_depth.tif"] != threads["layers/critical_depth.tif"]
    assert hashes(run_small(config, force=True).folder) == other


def test_a_killed_worker_costs_only_its_tiles(tmp_path: Path, address: str) -> None:
    from distributed import Client

    config = make_region(tmp_path)
    threads = hashes(run_small(config).folder)
    with Client(address, set_as_default=False) as client:
        victim = next(iter(client.run(os.getpid).values()))

    class Killer(job.Silent):
        killed = False

        def advance(self) -> None:
            if not self.killed:
                self.killed = True
                os.kill(victim, signal.SIGKILL)

    settings = small_tiles(config, scheduler=address)
    result = job.run(settings, force=True, listener=Killer(), block=16)
    assert hashes(result.folder) == threads


def test_no_scheduler_at_the_address(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(schedule, "_ANSWER_S", 1)
    with pytest.raises(InputError, match=r"no dask scheduler answers at tcp://127\.0\.0\.1:9"):
        run_small(make_region(tmp_path), scheduler="tcp://127.0.0.1:9")


def test_other_software_on_the_workers_is_found_before_any_tile(
    tmp_path: Path, address: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    real = schedule.versions()
    monkeypatch.setattr(schedule, "versions", lambda: real | {"numpy": "1.2.3"})
    with pytest.raises(InputError, match=r"has other software: numpy .* \(here 1\.2\.3\)"):
        run_small(make_region(tmp_path), scheduler=address)
    assert not (tmp_path / "out.unfinished").exists()


def test_a_folder_that_workers_cannot_see_is_found_before_any_tile(
    tmp_path: Path, address: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    plain = Path.write_text

    def elsewhere(path: Path, text: str, **options: str) -> int:
        there = path.with_name("elsewhere") if path.name.startswith("probe-") else path
        return plain(there, text, **options)

    monkeypatch.setattr(Path, "write_text", elsewhere)
    with pytest.raises(InputError, match=r"does not see .* on a disk that all workers share"):
        run_small(make_region(tmp_path), scheduler=address)


def test_a_scheduler_without_workers(tmp_path: Path) -> None:
    distributed = pytest.importorskip("distributed", reason="needs the extra `cluster`")
    with (
        distributed.LocalCluster(n_workers=0, dashboard_address=None) as cluster,
        pytest.raises(InputError, match="no worker is connected"),
    ):
        run_small(make_region(tmp_path), scheduler=cluster.scheduler_address)


def test_an_input_that_breaks_on_a_worker_is_told(tmp_path: Path, address: str) -> None:
    config = make_region(tmp_path)
    data = (tmp_path / "salinity.tif").read_bytes()
    (tmp_path / "salinity.tif").write_bytes(data[: len(data) * 2 // 3])
    with pytest.raises((InputError, RunError), match=r"salinity\.tif"):
        run_small(config, scheduler=address)


def test_the_command_line_takes_a_scheduler(tmp_path: Path, address: str) -> None:
    config = make_region(tmp_path)
    script = "from saltrise.cli import main; main()"
    command = [sys.executable, "-c", script, "run", str(config), "-q", "--scheduler"]
    done = subprocess.run([*command, address], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stdout) == (0, ""), done.stderr
    wrong = subprocess.run([*command, "gpu"], capture_output=True, text=True, check=False)
    assert wrong.returncode == 2
    assert "--scheduler: is 'gpu', allowed: 'threads', 'processes'" in wrong.stderr
