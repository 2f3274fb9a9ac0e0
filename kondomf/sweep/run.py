"""Start or resume a sweep in its folder."""

import shutil
import socket
import sqlite3
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from os import getpid
from pathlib import Path
from typing import Any

from kondomf.sweep.driver import Driver
from kondomf.sweep.execute import load_point_function
from kondomf.sweep.executor import check_backend, make_executor
from kondomf.sweep.folder import RECORD, locked, prepare_folder, versions
from kondomf.sweep.plan import SweepPlan, load_sweep, plain_inputs
from kondomf.sweep.product import ProductBuild
from kondomf.sweep.progress import Progress
from kondomf.sweep.record import FAILED, Launch
from kondomf.sweep.stop import GraceOver, StopRequest, stop_signals
from kondomf.sweep.store import SqliteStore

DEFAULT_POINT = "kondomf.sweep.point:solve_point"
GRACE_SECONDS = 20.0

_FREE_BYTES = 100 * 2**20


@dataclass(frozen=True)
class RunOutcome:
    """How a launch ended: points of the whole run recorded as done and as failed, points still to do.

    interrupted: somebody stopped it. problem: what else ended it early or kept the product from being rebuilt, with the
    remedy. In every case starting the same sweep again goes on where it ended.
    """

    done: int
    failed: int
    remaining: int
    interrupted: bool
    problem: str | None = None


def run_sweep(
    sweep_path: str | Path,
    folder: str | Path,
    *,
    workers: int = 1,
    backend: str = "serial",
    progress: Progress | None = None,
    stop: Callable[[], bool] | None = None,
    point: str = DEFAULT_POINT,
    grace_seconds: float = GRACE_SECONDS,
) -> RunOutcome:
    """Start the sweep in `folder`, or resume it there if the inputs are the same.

    backend: "serial" (this process) or "local" (`workers` processes on this host). stop: asked before every new point;
    true ends the launch once running points are done, as the first Ctrl-C or SIGTERM does, which gives them
    `grace_seconds`; a second signal ends it at once. point: the function called for every point, "module:function".
    Raises InputError: wrong sweep, material, point function or workers; folder not a run, of other inputs or in use.
    """
    check_backend(backend, workers)
    plan = load_sweep(sweep_path)
    load_point_function(point)  # a misspelt name must not leave a folder behind
    folder = Path(folder)
    header = prepare_folder(folder, frozen_inputs(plan, point))
    build = ProductBuild(folder)
    with (
        locked(folder),
        SqliteStore(folder / RECORD, header.fingerprint) as store,
        _signals(grace_seconds, announce=progress is not None) as request,
    ):

        def should_stop() -> bool:
            return request.requested or (stop is not None and stop())

        def housekeep() -> str | None:
            build.renew()
            return _space_problem(folder)

        driver = Driver(plan, point, store, progress or Progress(), should_stop, housekeep)
        try:
            _compute(driver, plan, store, request, backend, workers)
            incomplete = build.finish()
        except KeyboardInterrupt:
            driver.stopped, incomplete = True, None
            build.abandon()
        statuses = list(store.statuses().values())
    failed = statuses.count(FAILED)
    remaining = plan.size - len(statuses)
    return RunOutcome(len(statuses) - failed, failed, remaining, driver.stopped, driver.problem or incomplete)


def frozen_inputs(plan: SweepPlan, point: str) -> dict[str, Any]:
    """Everything the points of a run derive from, defaults written out; plain data for run.toml."""
    return {
        "point": point,
        "phases": list(plan.phases),
        "axis_order": [axis.key for axis in plan.axes],
        "axes": {axis.key: list(axis.values) for axis in plan.axes},
        "material": plain_inputs(plan.material),
    }


def _compute(
    driver: Driver, plan: SweepPlan, store: SqliteStore, request: StopRequest, backend: str, workers: int
) -> None:
    driver.problem = _space_problem(store.path.parent)
    if driver.problem or len(store.statuses()) == plan.size:
        return
    executor = make_executor(backend, workers)
    try:
        launch = Launch(time.time(), socket.gethostname(), getpid(), backend, workers, versions())
        driver.run(executor, store.begin_launch(launch))
        request.disarm()
    except GraceOver:
        driver.stopped = True
    except sqlite3.OperationalError as error:
        driver.problem = f"cannot write {store.path}: {error}; free space, then start the same sweep again"
    finally:
        request.disarm()
        executor.close()


def _space_problem(folder: Path) -> str | None:
    free = shutil.disk_usage(folder).free
    if free >= _FREE_BYTES:
        return None
    return (
        f"only {free // 2**20} MiB are free on the disk of {folder}, {_FREE_BYTES // 2**20} MiB are needed; free "
        "space, then start the same sweep again"
    )


@contextmanager
def _signals(grace_seconds: float, announce: bool) -> Iterator[StopRequest]:
    """Only the main thread can take signals; elsewhere the caller stops a run through its argument."""
    if threading.current_thread() is threading.main_thread():
        with stop_signals(grace_seconds, announce) as request:
            yield request
    else:
        yield StopRequest(grace_seconds, announce)
