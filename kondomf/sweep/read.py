"""Look at a run without touching it, also while it is being written: what is committed is seen, nothing else."""

from collections import Counter
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kondomf.errors import InputError
from kondomf.sweep.folder import RECORD, Header, read_header, working_process
from kondomf.sweep.product import stack
from kondomf.sweep.progress import state_text
from kondomf.sweep.record import FAILED, Axis, PointRecord
from kondomf.sweep.store import SqliteStore


@dataclass(frozen=True)
class RunSummary:
    """Progress of a run. `done` excludes failed points; `statuses` counts by phase class and status.

    seconds_per_point: over all launches, None before the first point; remaining_seconds at that pace.
    working: who is computing at the moment, in words, or None.
    """

    total: int
    done: int
    failed: int
    remaining: int
    statuses: dict[str, dict[str, int]]
    seconds_per_point: float | None
    remaining_seconds: float | None
    working: str | None


@dataclass(frozen=True)
class Run:
    """A run folder as it is now: every call reads what is committed at that moment."""

    folder: Path
    header: Header

    @cached_property
    def axes(self) -> tuple[Axis, ...]:
        """Swept keys with their values, in the order of the dimensions of every array below."""
        axes = self.header.inputs["axes"]
        return tuple(Axis(key, tuple(axes[key])) for key in self.header.inputs["axis_order"])

    @property
    def phases(self) -> tuple[str, ...]:
        """Phase classes of the run."""
        return tuple(self.header.inputs["phases"])

    @property
    def shape(self) -> tuple[int, ...]:
        """Number of values on each axis."""
        return tuple(len(axis.values) for axis in self.axes)

    @property
    def material(self) -> dict[str, Any]:
        """The material that the axes vary, as a dict with the keys of a material file."""
        material: dict[str, Any] = self.header.inputs["material"]
        return material

    def records(self, phase: str) -> list[PointRecord]:
        """Committed points of a phase class, sorted by index, without their arrays."""
        self._check(phase)
        with self._store() as store:
            return store.records(phase)

    def status(self, phase: str) -> NDArray[Any]:
        """Status of every point, texts, shape of the axes; "" where a point is not committed."""
        status = np.full(self.shape, "", dtype=object)
        for record in self.records(phase):
            status[record.key.index] = record.result.status
        return status

    def quantity(self, phase: str, name: str) -> NDArray[Any]:
        """A scalar on the grid, shape of the axes: float (NaN where missing) or texts ("" where missing).

        Raises InputError for a name that no committed point has; `quantities` lists the names.
        """
        records = self.records(phase)
        self._check_name(name, _scalar_names(records), f"quantity of phase {phase!r}")
        return stack([(record.key.index, record.result.scalars.get(name)) for record in records], self.shape)

    def quantities(self, phase: str) -> list[str]:
        """Names for `quantity`."""
        return _scalar_names(self.records(phase))

    def arrays(self, phase: str, name: str) -> dict[tuple[int, ...], NDArray[Any]]:
        """An array of every committed point that has it, by index. Raises InputError for an unknown name."""
        self._check(phase)
        with self._store() as store:
            self._check_name(name, store.array_names(phase), f"array of phase {phase!r}")
            return dict(store.array(phase, name))

    def array_names(self, phase: str) -> list[str]:
        """Names for `arrays`."""
        self._check(phase)
        with self._store() as store:
            return store.array_names(phase)

    def summary(self) -> RunSummary:
        """How far the run is, and how long the rest will take at the pace of all points so far."""
        with self._store() as store:
            statuses, pace = store.statuses(), store.pace()
        total = int(np.prod(self.shape)) * len(self.phases)
        failed = sum(status == FAILED for status in statuses.values())
        remaining = total - len(statuses)
        seconds = pace.seconds / pace.points if pace.points else None
        counts = {
            phase: Counter(s for key, s in sorted(statuses.items()) if key.phase == phase) for phase in self.phases
        }
        return RunSummary(
            total=total,
            done=len(statuses) - failed,
            failed=failed,
            remaining=remaining,
            statuses={phase: dict(count) for phase, count in counts.items()},
            seconds_per_point=seconds,
            remaining_seconds=None if seconds is None else seconds * remaining,
            working=working_process(self.folder),
        )

    @contextmanager
    def _store(self) -> Iterator[SqliteStore]:
        with SqliteStore(self.folder / RECORD, self.header.fingerprint, readonly=True) as store:
            yield store

    def _check(self, phase: str) -> None:
        self._check_name(phase, list(self.phases), "phase class")

    def _check_name(self, name: str, known: list[str], what: str) -> None:
        if name not in known:
            raise InputError(f"{self.folder} has no {what} {name!r}; it has {', '.join(known) or 'none yet'}")


def open_run(folder: str | Path) -> Run:
    """A read-only view of a run folder. Raises InputError if it is none, damaged, or of another version."""
    folder = Path(folder)
    run = Run(folder, read_header(folder))
    with run._store():
        return run


def progress_text(run: Run) -> str:
    """The state of a run in a few lines for people."""
    summary = run.summary()
    lines = [
        f"{run.material['name']} in {run.folder}",
        state_text(summary.done + summary.failed, summary.failed, summary.total, summary.seconds_per_point),
    ]
    lines += [f"  {a.key}: {len(a.values)} values, {a.values[0]:g} to {a.values[-1]:g}" for a in run.axes]
    for phase, counts in summary.statuses.items():
        lines.append(f"  {phase}: " + (", ".join(f"{n} {status}" for status, n in counts.items()) or "no point yet"))
    lines += [f"  failed {record.key}: {record.result.message}" for record in _some_failures(run)]
    if summary.working:
        lines.append(f"running: {summary.working}")
    elif summary.remaining:
        lines.append("not running; start the same sweep in the same folder to go on")
    return "\n".join(lines)


def _some_failures(run: Run, most: int = 3) -> list[PointRecord]:
    records = (record for phase in run.phases for record in run.records(phase))
    return [record for record in records if record.result.status == FAILED][:most]


def _scalar_names(records: list[PointRecord]) -> list[str]:
    return sorted({name for record in records for name in record.result.scalars})
