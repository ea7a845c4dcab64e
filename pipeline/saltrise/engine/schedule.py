"""The only module that knows dask: run tasks on threads, processes or a cluster of its workers."""

from __future__ import annotations

import ctypes
import multiprocessing
import os
import uuid
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import CancelledError, Executor, ProcessPoolExecutor, ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from functools import lru_cache, partial
from pathlib import Path
from typing import Any, TypeVar

from dask.base import compute
from dask.callbacks import Callback
from dask.delayed import delayed

from saltrise.engine.identity import versions
from saltrise.engine.plan import Plan
from saltrise.engine.stop import ask_stop, clear_stop
from saltrise.engine.tiles import run_tile
from saltrise.errors import InputError, RunError, SaltriseError
from saltrise.io import durable
from saltrise.io.fingerprint import code_print
from saltrise.io.sources import is_remote

T = TypeVar("T")
R = TypeVar("R")

PLAN = "plan.pickle"

_MMAP_THRESHOLD, _TRIM_THRESHOLD, _ARENA_MAX = -3, -1, -8
_KEPT_BYTES = 32 << 20


def keep_memory() -> None:
    """Ask the C library to keep freed arrays of up to 32 MB for the next block.

    glibc gives each back to the system and takes it anew, zeroed, for every block, and threads
    that share memory wait for each other while it does: a tenth of the run. Other C libraries are
    left as they are. All threads draw on one heap: those of other threads come in pieces of 64 MB,
    which arrays outgrow, and then pieces come and go.
    """
    _call_libc("mallopt", _ARENA_MAX, 1)
    _call_libc("mallopt", _MMAP_THRESHOLD, _KEPT_BYTES)
    _call_libc("mallopt", _TRIM_THRESHOLD, 32 * _KEPT_BYTES)


def release_memory() -> None:
    """Give back to the system what `keep_memory` kept."""
    _call_libc("malloc_trim", 0)


def _call_libc(name: str, *arguments: int) -> None:
    call = getattr(ctypes.CDLL(None), name, None) if os.name == "posix" else None
    if call is not None:
        call(*arguments)


def on_threads(
    task: Callable[[T], R], items: Iterable[T], workers: int, done: Callable[[R], None]
) -> list[R]:
    """Apply `task` to each item on `workers` threads; `done` hears of each result as it comes.

    Results come back in the items' order. When one task fails, or the run is asked to stop, the
    others end at their next block.
    """
    keep_memory()
    with ThreadPoolExecutor(workers) as pool:
        found = _compute([(task, item) for item in items], "threads", pool, done)
    release_memory()
    return found


def run_tiles(
    plan: Plan, indices: list[int], scheduler: str, workers: int, done: Callable[[int], None]
) -> None:
    """Run the given tiles of a plan.

    Parameters
    ----------
    plan : Plan
        The region.
    indices : list of int
        Tiles to run.
    scheduler : str
        "threads", "processes" or the address of a running dask scheduler ("tcp://host:port").
    workers : int
        Threads or processes at work; a cluster has its own.
    done : callable
        Called with the index of each tile once it is durable.

    Raises
    ------
    InputError
        The cluster cannot take the run: no answer, other software, or a folder it cannot see.
    RunError
        A tile failed, or a worker was killed.
    """
    if not indices:
        return
    if scheduler == "threads":
        on_threads(lambda index: run_tile(plan, index), indices, workers, done)
        return
    durable.write_pickle(plan.work / PLAN, plan)
    tasks = [(str(plan.work), plan.run, index) for index in indices]
    if scheduler == "processes":
        _on_processes(tasks, workers, done)
    else:
        _on_cluster(plan, tasks, scheduler, done)


_Task = tuple[str, str, int]


def _on_processes(tasks: list[_Task], workers: int, done: Callable[[int], None]) -> None:
    try:
        with _processes(workers) as pool:
            _compute([(_run_tile_of, task) for task in tasks], "processes", pool, done)
    except BrokenProcessPool as error:
        raise RunError(f"a worker process was killed{_KILLED}") from error


_KILLED = (
    ", most often for memory; finished tiles are kept. Use fewer run.workers or a smaller "
    "run.tile and run the same command again"
)


@contextmanager
def _processes(workers: int) -> Iterator[Executor]:
    # Forking a process that holds GDAL handles and threads is not safe.
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(workers, mp_context=context) as pool:
        try:
            yield pool
        except BaseException:
            pool.shutdown(wait=False, cancel_futures=True)
            for process in list((pool._processes or {}).values()):
                process.terminate()
            raise


def _run_tile_of(task: _Task) -> int:
    work, run, index = task
    try:
        return run_tile(_plan_in(work, run), index)
    except SaltriseError as error:
        # What lies behind it (a GDAL error) may not pickle, and would take the message with it.
        error.__cause__ = error.__context__ = None
        raise


@lru_cache(maxsize=1)
def _plan_in(work: str, run: str) -> Plan:  # noqa: ARG001 - a worker may outlive a run
    keep_memory()
    plan: Plan = durable.read_pickle(Path(work) / PLAN)
    return plan


def _compute(
    tasks: Sequence[tuple[Callable[[Any], R], Any]],
    scheduler: str,
    pool: Executor,
    done: Callable[[R], None],
) -> list[R]:
    clear_stop()
    # Bound here, not passed as arguments: dask would take dataclass arguments apart.
    graph = [delayed(partial(task, item), pure=False, traverse=False)() for task, item in tasks]

    def heard(_key: Any, result: R, *_graph_state: Any) -> None:
        done(result)

    try:
        with Callback(posttask=heard):
            return list(compute(*graph, scheduler=scheduler, pool=pool))
    except BaseException:
        ask_stop()
        raise


def _on_cluster(plan: Plan, tasks: list[_Task], address: str, done: Callable[[int], None]) -> None:
    try:
        from distributed import Client, as_completed
        from distributed.scheduler import KilledWorker
    except ImportError as error:
        raise InputError(
            f"run.scheduler: {address} needs dask's distributed scheduler; install it with "
            "pip install 'saltrise[cluster]'"
        ) from error
    try:
        client = Client(address, timeout=_ANSWER_S, set_as_default=False)
    except (OSError, TimeoutError, ValueError) as error:
        raise InputError(
            f"run.scheduler: no dask scheduler answers at {address} ({error}); start one with "
            "`dask scheduler` and workers with `dask worker`"
        ) from error
    with client:
        _require_fit(client, plan)
        futures = client.map(_run_tile_of, tasks, pure=False, key=_keys(tasks))
        try:
            for future in as_completed(futures, loop=client.loop):
                done(future.result())
        except KilledWorker as error:
            raise RunError(f"several dask workers were killed over one tile{_KILLED}") from error
        except (OSError, CancelledError) as error:
            raise RunError(
                f"the dask scheduler at {address} went away ({error}); finished tiles are kept, "
                "run the same command again"
            ) from error
        finally:
            client.cancel(futures)


_ANSWER_S = 20


def _keys(tasks: list[_Task]) -> list[str]:
    # Unlike any other run's, so that no answer a scheduler still holds is taken for ours.
    mark = uuid.uuid4().hex
    return [f"tile-{index}-{mark}" for _, _, index in tasks]


def _require_fit(client: Any, plan: Plan) -> None:
    """Before any work: every worker has this software, sees the run's folder and the inputs."""
    token = uuid.uuid4().hex
    probe = plan.work / f"probe-{token}"
    probe.write_text(token)
    files = sorted(
        {
            tile.file.path
            for reader in plan.readers.values()
            for tile in reader.aligned.mosaic.tiles
            if not is_remote(tile.file.path)
        }
    )
    try:
        answers = client.run(_probe, str(probe), token, files, _software())
    except Exception as error:
        # Whatever a foreign worker raises, it cannot take the run; mostly the package is missing.
        raise InputError(
            f"run.scheduler: a dask worker cannot run saltrise ({error}); install the same "
            "versions there as here"
        ) from error
    finally:
        probe.unlink(missing_ok=True)
    if not answers:
        raise InputError("run.scheduler: no worker is connected; start some with `dask worker`")
    faults = [f"run.scheduler: worker {at} {text}" for at, text in sorted(answers.items()) if text]
    if faults:
        raise InputError(*faults)


def _software() -> dict[str, str]:
    return versions() | {"saltrise's code": code_print()}


def _probe(probe: str, token: str, files: list[str], here: dict[str, str]) -> str:
    """What is wrong with this worker, or nothing."""
    there = _software()
    other = [f"{name} {there.get(name)} (here {here[name]})" for name in here]
    other = [text for name, text in zip(here, other, strict=True) if there.get(name) != here[name]]
    if other:
        return f"has other software: {', '.join(other)}; install the same versions"
    path = Path(probe)
    if not path.is_file() or path.read_text() != token:
        return f"does not see {path.parent}; put output.folder on a disk that all workers share"
    unseen = [file for file in files if not Path(file).is_file()]
    if unseen:
        return f"does not see {', '.join(unseen[:3])}; put the inputs on a disk that all share"
    return ""
