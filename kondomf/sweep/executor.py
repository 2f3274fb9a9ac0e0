"""Where points run: in this process, or on worker processes of this host. Both look the same to the driver."""

import logging
import os
import queue
import signal
from collections import deque
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from multiprocessing import resource_tracker
from typing import Any, Protocol

from kondomf.errors import InputError
from kondomf.sweep.execute import Finished, Task, execute

BACKENDS = ("serial", "local")

_TASKS_PER_WORKER = 3

KEPT_BYTES = 2**28
"""Freed memory that a worker keeps for its next arrays."""


class Executor(Protocol):
    """Runs tasks; knows nothing of points, parents, attempts or records."""

    slots: int
    """Tasks worth having under way: enough to keep all workers busy, few enough to keep memory low."""

    def submit(self, task: Task) -> None:
        """Take a task."""

    def next_finished(self, timeout: float) -> Finished | None:
        """The end of one task; None if there was none for `timeout` seconds."""

    def drop_waiting(self) -> set[str]:
        """Forget the tasks that no worker has begun; returns their names."""

    def worker_count(self) -> int:
        """Workers alive at the moment."""

    def close(self) -> None:
        """End all workers, whatever they are doing."""


class SerialExecutor:
    """Runs each task in this process when its end is asked for."""

    slots = 1

    def __init__(self) -> None:
        self._waiting: deque[Task] = deque()

    def submit(self, task: Task) -> None:
        self._waiting.append(task)

    def next_finished(self, timeout: float) -> Finished | None:
        return execute(self._waiting.popleft()) if self._waiting else None

    def drop_waiting(self) -> set[str]:
        names = {task.name for task in self._waiting}
        self._waiting.clear()
        return names

    def worker_count(self) -> int:
        return 1

    def close(self) -> None:
        """Nothing runs outside this process."""


class LocalExecutor:
    """Worker processes on this host under dask.distributed, one thread each; they end with this process."""

    def __init__(self, workers: int) -> None:
        self.slots = _TASKS_PER_WORKER * workers
        self._ended: queue.SimpleQueue[Any] = queue.SimpleQueue()
        self._futures: dict[str, Any] = {}
        environment = set(os.environ)
        with _interrupts_blocked():
            self._cluster, self._client = _start_cluster(workers)
        self._added_variables = set(os.environ) - environment

    def submit(self, task: Task) -> None:
        future = self._client.submit(execute, task, key=task.name, pure=False, fifo_timeout="0 s")
        self._futures[task.name] = future
        future.add_done_callback(self._ended.put)

    def next_finished(self, timeout: float) -> Finished | None:
        try:
            future = self._ended.get(timeout=timeout)
        except queue.Empty:
            return None
        if future.key not in self._futures:  # dropped
            return None
        try:
            finished: Finished = future.result(timeout=timeout)
        except TimeoutError:  # the worker died with the result; the scheduler has the task run again
            future.add_done_callback(self._ended.put)
            return None
        except Exception:  # `execute` raises nothing: the task lost its worker
            finished = Finished(future.key, None)
        del self._futures[future.key]
        return finished

    def drop_waiting(self) -> set[str]:
        begun = {name for name, future in self._futures.items() if future.done()}
        # A worker too busy to answer counts as having begun nothing: its results are computed again after resumption.
        with suppress(TimeoutError):
            answers = self._client.sync(self._client._run, _begun, on_error="ignore", callback_timeout=5)
            begun.update(*answers.values())
        dropped = {name: future for name, future in self._futures.items() if name not in begun}
        for name in dropped:
            del self._futures[name]
        self._client.cancel(list(dropped.values()))
        return set(dropped)

    def worker_count(self) -> int:
        return len(self._cluster.scheduler.workers)

    def close(self) -> None:
        for nanny in self._cluster.workers.values():
            nanny.close_gracefully()  # it would start a new worker in place of the one that is killed next
            with suppress(ProcessLookupError, TypeError):
                os.kill(nanny.pid, signal.SIGKILL)
        self._client.close()
        self._cluster.close()
        for name in self._added_variables:  # thread counts that the cluster hands to its workers
            os.environ.pop(name, None)


def check_backend(backend: str, workers: int) -> None:
    """Raise InputError for an unknown backend or an impossible number of workers."""
    if backend not in BACKENDS:
        raise InputError(f"backend {backend!r} is unknown; legal are {', '.join(BACKENDS)}")
    if workers < 1 or (backend == "serial" and workers > 1):
        raise InputError(f"{workers} workers cannot run the backend {backend!r}; serial has 1, local 1 or more")


def make_executor(backend: str, workers: int) -> Executor:
    """Start a backend that `check_backend` accepts."""
    return SerialExecutor() if backend == "serial" else LocalExecutor(workers)


def _start_cluster(workers: int) -> tuple[Any, Any]:
    import dask
    from distributed import Client, LocalCluster

    settings = {
        "distributed.scheduler.allowed-failures": 0,  # the driver counts attempts
        "distributed.scheduler.worker-ttl": "2 hours",  # a kernel may hold the interpreter lock for long
        "distributed.nanny.environ.NUMBA_NUM_THREADS": 1,
        # Its default of 64 kB makes glibc give the memory of every temporary array back and fetch it again, which
        # more than doubles the time of a point.
        "distributed.nanny.pre-spawn-environ.MALLOC_TRIM_THRESHOLD_": KEPT_BYTES,
        "distributed.nanny.pre-spawn-environ.MALLOC_MMAP_THRESHOLD_": KEPT_BYTES,
    }
    # For good: connections that end late would speak up after the cluster has closed and lifted its own silence.
    for handler in logging.getLogger("distributed").handlers:
        handler.setLevel(logging.CRITICAL)
    with dask.config.set(settings):
        cluster = LocalCluster(
            n_workers=workers,
            threads_per_worker=1,
            processes=True,
            dashboard_address="127.0.0.1:0",  # any free port; None would insist on a fixed one
            scheduler_kwargs={"dashboard": False},
            silence_logs=logging.CRITICAL,
        )
    return cluster, Client(cluster)


def _begun(dask_worker: Any) -> list[str]:
    tasks = dask_worker.state.tasks.values()
    return [task.key for task in tasks if task.state in ("executing", "memory")]  # running, or done but not yet told


@contextmanager
def _interrupts_blocked() -> Iterator[None]:
    """Keep Ctrl-C from threads and processes started meanwhile, and from those that they start.

    The terminal sends it to all processes, but only the driver knows what to do.
    """
    resource_tracker.ensure_running()  # its start, which the first worker would cause, unblocks the signals again
    before = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, before)
