"""What a sweep knows about one point: how it is addressed, what came out, and how it was run."""

import re
from dataclasses import dataclass
from typing import Any, NamedTuple

from numpy.typing import NDArray

FAILED = "failed"
"""Status of a point whose calculation raised, or ended its worker again and again."""

Scalar = float | int | str | None
Arrays = dict[str, NDArray[Any]]

_UNIT = re.compile(r"(?:^|[._])(?P<unit>meV|K|T|tesla|kB|angstrom|degree|seconds)?(?P<per>_?per_[a-zA-Z0-9]+)?$")


@dataclass(frozen=True)
class Axis:
    """One swept key of the material (dotted name, unit at its end) and its values in the order they are visited."""

    key: str
    values: tuple[float, ...]


@dataclass(frozen=True, order=True)
class PointKey:
    """Address of a point: phase class and one index per axis."""

    phase: str
    index: tuple[int, ...]

    def __str__(self) -> str:
        return f"{self.phase} {list(self.index)}"


@dataclass(frozen=True)
class PointResult:
    """What the point function returns.

    status: the word for the outcome, e.g. "minimum"; scalars: numbers and short texts by name; arrays: numeric arrays
    of any shape by name (a warm start gets this dict of its parent). Names end in their unit ("gap_meV").
    message: the reason of a failure, empty otherwise.
    """

    status: str
    scalars: dict[str, Scalar]
    arrays: Arrays
    message: str = ""


@dataclass(frozen=True)
class Execution:
    """How a point was run; comparisons of runs leave this aside. Times in seconds, `committed` since the epoch."""

    launch: int
    attempt: int
    wall_seconds: float
    host: str
    committed: float


@dataclass(frozen=True)
class PointRecord:
    """One committed point; `inputs` is its material as a dict, `seed` the seed of its random starts."""

    key: PointKey
    inputs: dict[str, Any]
    seed: int
    result: PointResult
    execution: Execution


@dataclass(frozen=True)
class Launch:
    """One start of the driver; `started` in seconds since the epoch."""

    started: float
    host: str
    pid: int
    backend: str
    workers: int
    versions: dict[str, str]


class Pace(NamedTuple):
    """Points committed and the seconds this took, over all launches (each from its start to its last commit)."""

    points: int
    seconds: float


def unit_of(name: str) -> str:
    """Unit at the end of a name: "gap_meV" -> "meV", "entropy_kB_per_cell" -> "kB/cell"; "1" if it carries none."""
    match = _UNIT.search(name)
    if match is None:
        return "1"
    unit, per = match["unit"] or "1", match["per"]
    return f"{unit}/{per.split('per_')[1]}" if per else unit
