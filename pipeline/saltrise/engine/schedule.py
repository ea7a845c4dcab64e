"""The only module that knows dask: run a task over many items on threads or processes."""

from __future__ import annotations

import ctypes
import multiprocessing
import os
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import Executor, ProcessPoolExecutor, ThreadPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from functools import lru_cache, partial
from pathlib import Path
from typing import Any, TypeVar

from dask.base import compute
from dask.callbacks import Callback
from dask.delayed import delayed

from saltrise.engine.plan import Plan
from saltrise.engine.stop import ask_stop, clear_stop
from saltrise.engine.tiles import run_tile
from saltrise.errors import RunError
from saltrise.io import durable

T = TypeVar("T")
R = TypeVar("R")

PLAN = "plan.pickle"

_MMAP_THRESHOLD, _TRIM_THRESHOLD = -3, -1
_KEPT_BYTES = 32 << 20


def keep_memory() -> None:
    """Ask the C library to keep freed arrays of up to 32 MB for the next block.

    glibc gives each back to the system and takes it anew, zeroed, for every block: a tenth of
    the run. Other C libraries are left as they are.
    """
    tune = getattr(ctypes.CDLL(None), "mallopt", None) if os.name == "posix" else None
    if tune is not None:
        tune(_MMAP_THRESHOLD, _KEPT_BYTES)
        tune(_TRIM_THRESHOLD, 32 * _KEPT_BYTES)


def on_threads(
    task: Callable[[T], R], items: Iterable[T], workers: int, done: Callable[[R], None]
) -> list[R]:
    """Apply `task` to each item on `workers` threads; `done` hears of each result as it comes.

    Results come back in the items' order. When one task fails, or the run is asked to stop, the
    others end at their next block.
    """
    with ThreadPoolExecutor(workers) as pool:
        return _compute([(task, item) for item in items], "threads", pool, done)


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
        "threads" or "processes".
    workers : int
        Threads or processes at work.
    done : callable
        Called with the index of each tile once it is durable.

    Raises
    ------
    RunError
        A tile failed, or a worker process was killed.
    """
    if scheduler == "threads":
        keep_memory()
        on_threads(lambda index: run_tile(plan, index), indices, workers, done)
        return
    durable.write_pickle(plan.work / PLAN, plan)
    try:
        with _processes(workers) as pool:
            tasks = [(_run_tile_of, (str(plan.work), index)) for index in indices]
            _compute(tasks, "processes", pool, done)
    except BrokenProcessPool as error:
        raise RunError(
            "a worker process was killed, most often for memory; finished tiles are kept. "
            "Use fewer run.workers or a smaller run.tile and run the same command again"
        ) from error


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


def _run_tile_of(place: tuple[str, int]) -> int:
    return run_tile(_plan_in(place[0]), place[1])


@lru_cache(maxsize=1)
def _plan_in(work: str) -> Plan:
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
