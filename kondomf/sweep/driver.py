"""The loop of a launch: hand out points whose parent is committed, commit what comes back, end in good order."""

import heapq
import time
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

from kondomf.sweep.execute import Finished, Task
from kondomf.sweep.executor import Executor
from kondomf.sweep.plan import SweepPlan, plain_inputs
from kondomf.sweep.progress import Progress
from kondomf.sweep.record import FAILED, Execution, PointKey, PointRecord, PointResult
from kondomf.sweep.store import Store

MAX_ATTEMPTS = 3
"""Workers that a point may end before it counts as failed."""

_POLL_SECONDS = 0.5
_NO_WORKER_SECONDS = 60.0
_HOUSEKEEPING_SECONDS = 600.0


@dataclass(frozen=True)
class _Attempt:
    key: PointKey
    inputs: dict[str, Any]
    seed: int
    number: int = 1


class Driver:
    """Owns order, attempts and commits. Only the plan says who starts from whom, so results depend on nothing else.

    should_stop: asked before points are handed out. housekeep: called every ten minutes; returns a reason to end the
    launch, or None. After `run`, `stopped` tells whether should_stop ended it with work left, `problem` what else did.
    """

    def __init__(
        self,
        plan: SweepPlan,
        point: str,
        store: Store,
        progress: Progress,
        should_stop: Callable[[], bool],
        housekeep: Callable[[], str | None],
    ) -> None:
        self.stopped = False
        self.problem: str | None = None
        self._ending = False
        self._plan, self._point, self._store, self._progress = plan, point, store, progress
        self._should_stop, self._housekeep = should_stop, housekeep
        self._committed = store.statuses()
        self._ready: list[tuple[Any, PointKey]] = []
        self._suspects: deque[_Attempt] = deque()
        self._running: dict[str, _Attempt] = {}
        for key in plan.points():
            parent = plan.parent(key)
            if key not in self._committed and (parent is None or parent in self._committed):
                self._release(key)

    def run(self, executor: Executor, launch: int) -> None:
        """Run until everything is committed, or until something ends the launch early."""
        failed = sum(status == FAILED for status in self._committed.values())
        self._progress.start(self._plan.size, len(self._committed), failed)
        try:
            self._loop(executor, launch)
        finally:
            self._progress.close()

    def _loop(self, executor: Executor, launch: int) -> None:
        last_worker = last_housekeeping = time.monotonic()
        while True:
            self._heed_stop(executor)
            self._hand_out(executor)
            if not self._running:
                return
            finished = executor.next_finished(_POLL_SECONDS)
            if finished is not None:
                self._take(finished, launch)
            self._progress.tick()
            now = time.monotonic()
            if executor.worker_count():
                last_worker = now
            elif now - last_worker > _NO_WORKER_SECONDS:
                self.problem = "no worker is left and none came back; start the same sweep again to go on"
                return
            if now - last_housekeeping > _HOUSEKEEPING_SECONDS:
                last_housekeeping = now
                self.problem = self.problem or self._housekeep()

    def _heed_stop(self, executor: Executor) -> None:
        work_left = self._ready or self._suspects or self._running
        if self._ending or not work_left:
            return
        self.stopped = self._should_stop()
        self._ending = self.stopped or self.problem is not None
        if self._ending:
            for name in executor.drop_waiting():
                del self._running[name]

    def _hand_out(self, executor: Executor) -> None:
        """Keep the workers supplied. Points whose worker died run alone, so that only a killer is held guilty."""
        if self._ending:
            return
        alone = self._suspects or any(attempt.number > 1 for attempt in self._running.values())
        while self._ready and not alone and len(self._running) < executor.slots:
            _, key = heapq.heappop(self._ready)
            inputs = plain_inputs(self._plan.material_at(key))
            self._submit(executor, _Attempt(key, inputs, self._plan.seed(key)))
        if self._suspects and not self._running:
            self._submit(executor, self._suspects.popleft())

    def _submit(self, executor: Executor, attempt: _Attempt) -> None:
        parent, arrays = self._plan.parent(attempt.key), None
        if parent is not None and self._committed[parent] != FAILED:
            arrays = self._store.arrays(parent)
        name = f"{attempt.key}, attempt {attempt.number}"
        self._running[name] = attempt
        executor.submit(Task(name, self._point, attempt.inputs, attempt.seed, arrays))

    def _take(self, finished: Finished, launch: int) -> None:
        attempt, result = self._running.pop(finished.name), finished.result
        if result is None:
            if attempt.number < MAX_ATTEMPTS:
                self._suspects.append(replace(attempt, number=attempt.number + 1))
                return
            result = PointResult(FAILED, {}, {}, f"ended its worker {MAX_ATTEMPTS} times (out of memory, or a crash)")
        execution = Execution(launch, attempt.number, finished.wall_seconds, finished.host, time.time())
        self._store.put(PointRecord(attempt.key, attempt.inputs, attempt.seed, result, execution))
        self._committed[attempt.key] = result.status
        self._progress.point(result.status == FAILED)
        for child in self._plan.children(attempt.key):
            self._release(child)

    def _release(self, key: PointKey) -> None:
        heapq.heappush(self._ready, (self._plan.rank(key), key))
