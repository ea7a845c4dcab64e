"""Runs ended at any moment go on to the same bytes; runs of something else are refused."""

from __future__ import annotations

import shutil
import signal
import subprocess
from pathlib import Path

import numpy as np
import pytest
from filelock import FileLock

import regions
import runs
from runs import hashes, make_region, run_small, stopped_run
from saltrise import job
from saltrise.engine import identity
from saltrise.errors import InputError, RunError
from saltrise.io import durable


@pytest.fixture(autouse=True)
def _fixed_date(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("SOURCE_DATE_EPOCH", runs.DATE)


@pytest.fixture(scope="module")
def region(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, str], list[str]]:
    """A region's config, the hashes of an uninterrupted run, and its durable steps."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("SOURCE_DATE_EPOCH", runs.DATE)
        folder = tmp_path_factory.mktemp("region")
        config = make_region(folder)
        steps = stopped_run(config, -1)
        return config, hashes(folder / "out"), steps[:-1]


@pytest.fixture
def again(region, tmp_path: Path) -> Path:
    """A fresh copy of the region; its inputs keep their times."""
    config = region[0]
    for name in ("depth.tif", "texture.tif", "salinity.tif", "demand.tif", "zones.gpkg"):
        shutil.copy2(config.parent / name, tmp_path / name)
    text = config.read_text().replace(str(config.parent / "out"), str(tmp_path / "out"))
    (tmp_path / "region.toml").write_text(text)
    return tmp_path / "region.toml"


def same(folder: Path, expected: dict[str, str]) -> bool:
    """Whether a run holds the same bytes; its record names another folder."""
    found = hashes(folder)
    record = (folder / "run.json").read_text()
    assert str(folder) in record
    return {k: v for k, v in found.items() if k != "run.json"} == {
        k: v for k, v in expected.items() if k != "run.json"
    }


def test_a_run_ended_at_every_durable_step_goes_on_to_the_same_bytes(region, again: Path) -> None:
    _, expected, steps = region
    assert len(steps) > 25
    folder = again.parent
    records = set()
    for number in range(1, len(steps) + 1):
        shutil.rmtree(folder / "out", ignore_errors=True)
        seen = stopped_run(again, number)
        assert len(seen) == number
        finished = (folder / "out" / "run.json").exists()
        assert finished == (seen[-1] == "finished")
        if not finished:
            assert not (folder / "out").exists()
            run_small(again)
        assert same(folder / "out", expected), seen[-1]
        records.add((folder / "out" / "run.json").read_text())
        assert sorted(p.name for p in folder.iterdir() if "out" in p.name) == ["out"]
    assert len(records) == 1


def test_a_run_ended_again_and_again_gets_there(region, again: Path) -> None:
    _, expected, steps = region
    ends = 0
    # Six steps at a time: the zone tables, item.json, run.json and the last rename are done in
    # one go.
    while stopped_run(again, 6)[-1] not in ("whole", "finished"):
        ends += 1
        assert ends < len(steps)
    assert ends > len(steps) // 9
    assert same(again.parent / "out", expected)


def test_replacing_a_finished_run_is_safe_at_every_step(region, again: Path) -> None:
    _, expected, steps = region
    folder = again.parent
    first = hashes(run_small(again).folder)
    last = steps.index("run.json") + 1
    for number in (3, last, last + 1, last + 2, last + 3):
        seen = stopped_run(again, number, force=True)
        if seen[-1] != "whole":
            older = [p for p in (folder / "out", folder / "out.replaced") if p.exists()]
            assert hashes(older[0]) == first
            run_small(again, force=True)
        assert same(folder / "out", expected)
        assert sorted(p.name for p in folder.iterdir() if "out" in p.name) == ["out"]


@pytest.mark.parametrize(
    ("name", "nth"),
    [
        ("survey", 1),
        ("000000.bin", 1),
        ("000003.json", 1),
        ("salt_load.tif", 1),
        ("zones.csv", 1),
        ("zones.gpkg", 1),
        ("run.json", 1),
        ("work removed", 1),
    ],
)
def test_kill_9_is_survived(region, again: Path, name: str, nth: int) -> None:
    killed = runs.child(again, runs.KILL.format(name=name, nth=nth))
    assert killed.returncode == -signal.SIGKILL
    assert not (again.parent / "out").exists()
    done = runs.child(again)
    assert done.returncode == 0, done.stderr
    assert same(again.parent / "out", region[1])


def test_resumed_tiles_are_counted_and_not_redone(again: Path) -> None:
    stopped_run(again, 2 + 2 * 4)
    seen: list[str] = []
    durable.observers.append(seen.append)
    try:
        run_small(again)
    finally:
        durable.observers.remove(seen.append)
    assert sum(name.endswith(".bin") for name in seen) == 5


def test_the_summary_of_a_resumed_run_says_so(again: Path) -> None:
    stopped_run(again, 2 + 2 * 4)
    assert "tiles: 4 of 9 done by an earlier run" in runs.child(again).stderr


def damage(path: Path, how: str) -> None:
    data = bytearray(path.read_bytes())
    if how == "cut":
        path.write_bytes(data[: len(data) // 2])
    elif how == "flip":
        data[len(data) // 3] ^= 8
        path.write_bytes(data)
    elif how == "empty":
        path.write_bytes(b"")
    else:
        path.unlink()


@pytest.mark.parametrize("file", ["tiles/000001.bin", "records/000001.json"])
@pytest.mark.parametrize("how", ["cut", "flip", "empty", "gone"])
def test_damaged_tiles_are_redone(region, again: Path, file: str, how: str) -> None:
    stopped_run(again, 2 + 2 * 9)
    damage(again.parent / "out.unfinished" / "work" / file, how)
    run_small(again)
    assert same(again.parent / "out", region[1])


def test_half_written_files_do_not_reach_the_result(region, again: Path) -> None:
    stopped_run(again, 2 + 2 * 9 + 2)
    unfinished = again.parent / "out.unfinished"
    (unfinished / "layers" / "salt_load.tif.partial-0123").write_bytes(b"x")
    (unfinished / "zones.partial.gpkg").write_bytes(b"x")
    run_small(again)
    assert same(again.parent / "out", region[1])


@pytest.mark.parametrize(
    ("old", "new", "word"),
    [
        ("target_load = 2.0", "target_load = 3.0", "hazard.target_load: was 2.0, is 3.0"),
        ('unit = "dS/m"', 'unit = "mS/cm"', "groundwater.unit: was 'dS/m', is 'mS/cm'"),
        ('9 = "not soil"', '9 = "clay"', "soil.classes.9: was 'not soil', is 'clay'"),
        ('title = "Test"', 'title = "Other"', "title: was 'Test', is 'Other'"),
    ],
)
def test_a_changed_config_is_refused_with_what_changed(again: Path, old, new, word) -> None:
    stopped_run(again, 8)
    text = again.read_text()
    again.write_text(text.replace(old, new).replace('"9" =', "9 ="))
    if old not in text:
        again.write_text(text.replace(old.replace("9 =", '"9" ='), new.replace("9 =", '"9" =')))
    with pytest.raises(InputError, match="unfinished run of something else") as caught:
        run_small(again)
    assert word in str(caught.value)
    again.write_text(text)
    run_small(again)


def test_a_changed_input_or_tile_is_refused_and_force_starts_over(again: Path) -> None:
    stopped_run(again, 8)
    values = regions.fields((70, 80), np.random.default_rng(6))
    regions.write_raster(again.parent / "salinity.tif", values["salinity"], nodata=-9999)
    with pytest.raises(InputError, match=r"input salinity\.tif changed"):
        run_small(again)
    with pytest.raises(InputError, match="run tile: was 32, is 48"):
        run_small(again, tile=48)
    result = run_small(again, force=True)
    assert not result.layer("salt_load")[0].mask.all()


def test_other_code_or_other_libraries_are_refused(
    again: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    stopped_run(again, 8)
    with monkeypatch.context() as patch:
        patch.setattr(job, "code_print", lambda: "other")
        with pytest.raises(InputError, match=r"run code: was '[0-9a-f]{16}', is 'other'"):
            run_small(again)
    with monkeypatch.context() as patch:
        patch.setattr(job, "versions", lambda: job_versions | {"numpy": "1.2.3"})
        job_versions = identity.versions()
        with pytest.raises(InputError, match=r"version of numpy: was .*, is '1\.2\.3'"):
            run_small(again)
    run_small(again)


def test_workers_and_scheduler_may_change_on_the_way(region, again: Path) -> None:
    stopped_run(again, 8)
    run_small(again, workers=2)
    assert same(again.parent / "out", region[1])


def test_a_resumed_run_keeps_its_date(again: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    stopped_run(again, 8)
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1800000000")
    assert run_small(again).record["date"] == "2026-01-01T00:00:00Z"


@pytest.mark.parametrize("how", ["changed", "removed"])
def test_an_input_that_changes_under_way_ends_the_run_and_it_resumes(
    region, again: Path, how: str
) -> None:
    salinity = again.parent / "salinity.tif"
    kept = again.parent / "kept.tif"
    shutil.copy2(salinity, kept)

    def spoil(name: str) -> None:
        if name == "000002.json":
            if how == "changed":
                values = regions.fields((70, 80), np.random.default_rng(6))
                regions.write_raster(salinity, values["salinity"], nodata=-9999)
            else:
                salinity.unlink()

    durable.observers.append(spoil)
    try:
        with pytest.raises(RunError, match=r"salinity\.tif: was changed or removed"):
            run_small(again)
    finally:
        durable.observers.remove(spoil)
    assert not (again.parent / "out").exists()
    shutil.copy2(kept, salinity)
    run_small(again)
    assert same(again.parent / "out", region[1])


def test_a_full_disk_ends_the_run_and_it_resumes(region, again: Path) -> None:
    limit = "import resource; resource.setrlimit(resource.RLIMIT_FSIZE, (25_000, 25_000))"
    full = runs.child(again, limit)
    assert full.returncode == 1
    assert "no room left to write" in full.stderr
    assert "run the same command again" in full.stderr
    assert "Traceback" not in full.stderr
    assert not (again.parent / "out").exists()
    assert runs.child(again).returncode == 0
    assert same(again.parent / "out", region[1])


def test_too_small_a_disk_is_refused_before_any_tile(
    again: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from saltrise.engine import estimate

    class Usage:
        free = 1000

    monkeypatch.setattr(estimate.shutil, "disk_usage", lambda _: Usage)
    with pytest.raises(InputError, match=r"needs about .* GB of disk .* GB are free"):
        run_small(again)
    assert not (again.parent / "out.unfinished").exists()


def test_a_second_run_in_the_same_folder_is_refused(again: Path) -> None:
    with FileLock(str(again.parent / "out.unfinished.lock")):
        second = runs.child(again)
    assert second.returncode == 2
    assert "another run is working in this folder" in second.stderr


def test_a_killed_worker_process_costs_only_its_tile(region, again: Path) -> None:
    kill = "if __name__ != '__main__':\n" + "".join(
        f"    {line}\n" for line in runs.KILL.format(name="000002.bin", nth=1).splitlines()
    )
    killed = runs.child(again, kill, workers=2, scheduler="processes")
    assert killed.returncode == 1
    assert "a worker process was killed" in killed.stderr
    assert "run the same command again" in killed.stderr
    assert runs.child(again, workers=2, scheduler="processes").returncode == 0
    assert same(again.parent / "out", region[1])


@pytest.mark.parametrize(("sent", "code"), [(signal.SIGINT, 130), (signal.SIGTERM, 143)])
@pytest.mark.parametrize("when", ["survey.pickle", "000003.json", "evaporation.tif", "zones.csv"])
def test_a_signal_is_resumable(region, again: Path, sent, code, when: str) -> None:
    setup = (
        "def tell(name):\n"
        f"    if name == {when!r}:\n"
        f"        os.kill(os.getpid(), {int(sent)})\n"
        "durable.observers.append(tell)\n"
    )
    ended = runs.child(again, setup)
    assert ended.returncode == code
    assert "run the same command again" in ended.stderr
    assert runs.child(again).returncode == 0
    assert same(again.parent / "out", region[1])


@pytest.mark.bench
def test_random_kills(region, again: Path) -> None:
    random = np.random.default_rng(9)
    kills = 0
    for _ in range(60):
        process = runs.child(again, workers=2, wait=False)
        try:
            process.wait(timeout=random.uniform(0.3, 2.5))
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()
            kills += 1
        if (again.parent / "out").exists():
            assert same(again.parent / "out", region[1])
            shutil.rmtree(again.parent / "out")
    assert kills > 10
