"""Where does the work run: threads of this process, processes of this machine, or a dask cluster by address?

The only room that knows dask. A tile-day is the unit on a cluster; its blocks run on threads inside one worker.
"""

from __future__ import annotations

import contextlib
import ctypes
import os
import threading
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from typing import Any

from firnlight.core.errors import SettingsProblem
from firnlight.core.grid import Window
from firnlight.core.settings import Engine

_one_tile_day_at_a_time = threading.Lock()  # several would fight for the same cores and memory


_MMAP_THRESHOLD = -3  # glibc's M_MMAP_THRESHOLD
_LARGE_BYTES = 1 << 18
GLIBC_TRIM_BYTES = 128 << 10  # glibc's own default


def _give_back_memory() -> None:
    """Let glibc return large blocks to the system at once.

    By default it raises its threshold to the size of our blocks and keeps them in one heap per thread, where they
    splinter: a 10980 x 10980 tile then grew by 2 GB.
    """
    with contextlib.suppress(OSError, AttributeError):
        ctypes.CDLL(None).mallopt(_MMAP_THRESHOLD, _LARGE_BYTES)


def worker_count(workers: int | str) -> int:
    """Number of threads or processes that `workers` stands for on this machine."""
    return len(os.sched_getaffinity(0)) if workers == "all" else int(workers)


def run_blocks(
    work: Callable[[Window], None],
    windows: Iterable[Window],
    finishers: dict[str, Callable[[], Any]],
    workers: int,
) -> dict[str, Any]:
    """Run `work` on every window, then every finisher, as dask tasks on `workers` threads; the finishers' results.

    The first error stops what has not begun and is raised after all running tasks have ended.
    """
    import dask

    _give_back_memory()

    def after(finish: Callable[[], Any], _blocks: list[None]) -> Any:
        return finish()

    block = dask.delayed(work, pure=False)
    end = dask.delayed(after, pure=False)
    blocks = [block(window, dask_key_name=("chain", n)) for n, window in enumerate(windows)]
    ends = [end(finish, blocks, dask_key_name=("write", name)) for name, finish in finishers.items()]
    with ThreadPoolExecutor(workers, thread_name_prefix="firnlight") as pool, dask.config.set(pool=pool):
        results = dask.compute(*ends, scheduler="threads", optimize_graph=False)
    return dict(zip(finishers, results, strict=True))


def _in_worker(job: Callable[[int], Any], threads: int) -> Any:
    with _one_tile_day_at_a_time:
        return job(threads)


class Threads:
    """Tile-days one after another, each on all threads."""

    def __init__(self, workers: int) -> None:
        self.workers = workers

    def run(self, jobs: dict[str, Callable[[int], Any]]) -> Iterator[tuple[str, Any]]:
        """Name and result of each job as it ends; a job's exception is its result."""
        for name, job in jobs.items():
            try:
                yield name, job(self.workers)
            except Exception as error:
                yield name, error


class Cluster:
    """Tile-days as tasks of a dask.distributed cluster."""

    def __init__(self, client: Any, threads: int) -> None:
        self.client, self.threads = client, threads

    def run(self, jobs: dict[str, Callable[[int], Any]]) -> Iterator[tuple[str, Any]]:
        """Name and result of each job as it ends; a job's exception is its result."""
        from distributed import as_completed

        futures = {
            self.client.submit(_in_worker, job, self.threads, key=f"tile-day {name}", pure=False, retries=2): name
            for name, job in jobs.items()
        }
        for future in as_completed(list(futures)):
            error = future.exception()
            yield futures[future], error if error is not None else future.result()
            future.release()


@contextmanager
def engine(settings: Engine, address: str | None = None) -> Iterator[Threads | Cluster]:
    """The engine that the workflow (or `address`) asks for; a cluster made here ends with it.

    Raises
    ------
    SettingsProblem : nobody answers at the address.
    """
    where = address or settings.run_on
    workers = worker_count(settings.workers)
    if where == "threads":
        yield Threads(workers)
        return
    import dask
    from distributed import Client, LocalCluster

    if where == "processes":
        with (
            # dask's own trim threshold of 64 KiB for its workers makes this work 1.4 times slower
            dask.config.set({"distributed.nanny.pre-spawn-environ.MALLOC_TRIM_THRESHOLD_": GLIBC_TRIM_BYTES}),
            LocalCluster(
                n_workers=workers, threads_per_worker=1, memory_limit=settings.memory_per_worker, host="127.0.0.1",
                dashboard_address=None, silence_logs=50,
            ) as cluster,
            Client(cluster) as client,
        ):  # fmt: skip
            yield Cluster(client, 1)
        return
    try:
        client = Client(where, timeout="15s")
    except (OSError, TimeoutError) as error:
        raise SettingsProblem(
            "workflow or --cluster", "scheduler address", where, "a dask scheduler that answers within 15 s",
            f"start it, or correct the address ({error})",
        ) from error  # fmt: skip
    with client:
        threads = max((w["nthreads"] for w in client.scheduler_info(n_workers=-1)["workers"].values()), default=1)
        yield Cluster(client, threads)
