"""One point, run the same way by every backend: one thread, read-only parent, every failure turned into a result."""

import importlib
import socket
import time
import traceback
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import numpy as np

from kondomf.errors import InputError
from kondomf.sweep.record import FAILED, Arrays, PointResult

PointFunction = Callable[[dict[str, Any], int, Arrays | None], PointResult]
"""(material as a dict, seed, arrays of the parent or None) -> result; may raise."""


@dataclass(frozen=True)
class Task:
    """A point to run; `name` identifies it and its attempt, `point` is the dotted path "module:function"."""

    name: str
    point: str
    material: dict[str, Any]
    seed: int
    parent: Arrays | None


@dataclass(frozen=True)
class Finished:
    """The end of a task; `result` is None if its worker died."""

    name: str
    result: PointResult | None
    wall_seconds: float = 0.0
    host: str = ""


def load_point_function(point: str) -> PointFunction:
    """Import "module:function". Raises InputError if there is no such function."""
    module, _, name = point.partition(":")
    try:
        function: PointFunction = getattr(importlib.import_module(module), name)
    except (ImportError, AttributeError, ValueError) as error:
        raise InputError(f"no point function {point!r} ({error}); give it as module:function") from None
    return function


def execute(task: Task) -> Finished:
    """Run a task. An exception of the point function becomes a failed result that says what the traceback ends with."""
    start = time.perf_counter()
    try:
        function = load_point_function(task.point)
        with one_thread():
            start = time.perf_counter()  # imports are not the point's time
            result = _checked(function(task.material, task.seed, _frozen(task.parent)))
    except Exception as error:
        result = PointResult(FAILED, {}, {}, " ".join(traceback.format_exception_only(error)[-1].split()))
    return Finished(task.name, result, time.perf_counter() - start, socket.gethostname())


@contextmanager
def one_thread() -> Iterator[None]:
    """One thread for BLAS and numba: as many processes as cores are faster, and sums keep their order."""
    import numba
    import scipy.linalg  # noqa: F401  its BLAS has to be loaded to be limited
    from threadpoolctl import threadpool_limits

    threads = numba.get_num_threads()
    numba.set_num_threads(1)
    try:
        with threadpool_limits(1):
            yield
    finally:
        numba.set_num_threads(threads)


def _frozen(parent: Arrays | None) -> Arrays | None:
    """A private, contiguous, read-only copy, so that results cannot depend on how the arrays travelled."""
    if parent is None:
        return None
    copies = {name: np.array(array, order="C") for name, array in parent.items()}
    for copy in copies.values():
        copy.setflags(write=False)
    return copies


def _checked(result: PointResult) -> PointResult:
    if not isinstance(result, PointResult):
        raise TypeError(f"the point function returned {type(result).__name__}, not PointResult")
    scalars = {name: _plain(name, value) for name, value in result.scalars.items()}
    arrays = {name: np.asarray(array) for name, array in result.arrays.items()}
    for name, array in arrays.items():
        if array.dtype.kind not in "biufc":
            raise TypeError(f"array {name} holds {array.dtype}; only numbers are stored")
    return PointResult(result.status, scalars, arrays, result.message)


def _plain(name: str, value: Any) -> float | int | str | None:
    plain = value.item() if isinstance(value, np.generic) else value
    if plain is not None and not isinstance(plain, float | int | str):
        raise TypeError(f"scalar {name} is {type(plain).__name__}; use a number, a text or None")
    return plain
