"""Who does the work: this process, a local cluster of processes, or a cluster that exists. The only importer of dask.

A job is a plain function with plain arguments; it returns something small. However many work, the same jobs are done
and their results arrive by number. A bounded number of jobs is under way at any time.
"""

from __future__ import annotations

import contextlib
import os
from collections.abc import Callable, Iterator, Sequence
from typing import Any, Protocol

from hindlight.errors import StoppedError, UsageError

SCHEDULER_TIMEOUT_S = 10
AHEAD = 3  # jobs under way per worker
# The memory allocator's defaults on dask's workers trim and map so eagerly that array loops run at a fraction of
# their speed; one thread works per process, so one arena is enough.
WORKER_ENVIRONMENT = {
    "MALLOC_TRIM_THRESHOLD_": str(1 << 30),
    "MALLOC_MMAP_THRESHOLD_": str(1 << 30),
    "MALLOC_ARENA_MAX": "1",
    "OMP_NUM_THREADS": "1",
    "MKL_NUM_THREADS": "1",
    "OPENBLAS_NUM_THREADS": "1",
}

Job = tuple[Any, ...]
Done = Callable[[int, Any], None]


class Crew(Protocol):
    """Something that does jobs."""

    workers: int

    def run(self, function: Callable[..., Any], jobs: Sequence[Job], done: Done) -> None:
        """Do all jobs; `done` is called with each one's number and result, in any order."""


class InProcess:
    """Jobs one after the other in this process."""

    workers = 1

    def run(self, function: Callable[..., Any], jobs: Sequence[Job], done: Done) -> None:
        """See `Crew.run`."""
        for number, job in enumerate(jobs):
            done(number, function(*job))


class Cluster:
    """Jobs on a dask cluster, a bounded number under way."""

    def __init__(self, client: Any, workers: int) -> None:
        self.client = client
        self.workers = workers

    def run(self, function: Callable[..., Any], jobs: Sequence[Job], done: Done) -> None:
        """See `Crew.run`. Raises `StoppedError` when workers keep dying."""
        from distributed import KilledWorker, as_completed

        waiting: Iterator[tuple[int, Job]] = iter(enumerate(jobs))
        numbers: dict[str, int] = {}
        completed = as_completed()

        def submit() -> None:
            for number, job in waiting:
                future = self.client.submit(function, *job, pure=False)
                numbers[future.key] = number
                completed.add(future)
                return

        for _ in range(max(1, self.workers * AHEAD)):
            submit()
        for future in completed:
            try:
                result = future.result()
            except KilledWorker as error:
                raise StoppedError(
                    f"workers died again and again ({error}); the same command continues the run"
                ) from None
            done(numbers.pop(future.key), result)
            future.release()
            submit()


@contextlib.contextmanager
def assembled(workers: int | None, scheduler: str | None, is_small: bool) -> Iterator[Crew]:
    """The crew for a run: a scheduler's workers if an address is given, else this process or a local cluster.

    `workers` None means: this process for small work, one process per core otherwise.
    """
    if scheduler is not None:
        with _existing(scheduler) as crew:
            yield crew
        return
    count = workers if workers is not None else (1 if is_small else os.cpu_count() or 1)
    if count <= 1:
        with _one_thread():
            yield InProcess()
        return
    with _local(count) as crew:
        yield crew


@contextlib.contextmanager
def _local(count: int) -> Iterator[Crew]:
    """A local cluster of processes that other users of the machine cannot join: TLS with a certificate made for it."""
    import dask
    from distributed import Client, LocalCluster
    from distributed.security import Security

    config = {
        "distributed.nanny.pre-spawn-environ": WORKER_ENVIRONMENT,
        "distributed.logging": {"distributed": "error"},
        "distributed.worker.memory.target": False,
        "distributed.worker.memory.spill": False,
        "distributed.comm.timeouts.connect": "60s",
        "distributed.scheduler.http.routes": [],  # nothing is served to a browser, which could not be kept out
        "distributed.worker.http.routes": [],
    }
    with dask.config.set(config):
        security = Security.temporary()
        cluster = LocalCluster(
            n_workers=count, threads_per_worker=1, processes=True,
            dashboard_address="127.0.0.1:0", worker_dashboard_address="127.0.0.1:0",
            host="127.0.0.1", protocol="tls://", security=security, silence_logs=50,
        )  # fmt: skip
        try:
            with Client(cluster, security=security) as client:
                yield Cluster(client, count)
        finally:
            cluster.close()


@contextlib.contextmanager
def _existing(address: str) -> Iterator[Crew]:
    from distributed import Client

    try:
        client = Client(address, timeout=SCHEDULER_TIMEOUT_S)
    except (OSError, ValueError, TimeoutError) as error:
        raise UsageError(f"scheduler {address}: cannot be reached ({error}); check the address") from None
    with client:
        workers = len(client.scheduler_info()["workers"])
        if workers == 0:
            raise UsageError(f"scheduler {address}: has no workers; start some first")
        yield Cluster(client, workers)


@contextlib.contextmanager
def _one_thread() -> Iterator[None]:
    """One thread per job in this process too, so that last bits do not depend on the number of cores."""
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1):
        yield
