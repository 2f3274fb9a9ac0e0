"""What the branches along a parameter are: their phases, order parameters, ends and transitions, as plain numbers."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from kondomf.meanfield import Start, solve
from kondomf.meanfield.branches import Branch, Diagram
from kondomf.meanfield.continuation import BranchPoint
from kondomf.phases.labels import label
from kondomf.phases.order import Order
from kondomf.phases.spectrum import gap

Array = NDArray[np.float64]

QUANTITIES = ("free_energy_meV_per_cell", "hybridization", "spin_moment", "electron_moment", "curvature")
"""Per state: F, largest singular value of W, largest moments in units of hbar, lowest curvature that is no zero."""


@dataclass(frozen=True)
class NamedBranch:
    """A branch with the name of its phase, taken in its middle, and its table: x and QUANTITIES."""

    number: int
    phase: str
    branch: Branch
    table: dict[str, Array]


@dataclass(frozen=True)
class Along:
    """The branches of `diagram` described."""

    diagram: Diagram
    branches: tuple[NamedBranch, ...]

    @property
    def key(self) -> str:
        return self.diagram.family.key

    def columns(self) -> dict[str, list[Any]]:
        """One row per state: branch, x and QUANTITIES."""
        result: dict[str, list[Any]] = {"branch": [], self.key: [], **{name: [] for name in QUANTITIES}}
        for one in self.branches:
            result["branch"] += [one.number] * len(one.table["x"])
            result[self.key] += one.table["x"].tolist()
            for name in QUANTITIES:
                result[name] += one.table[name].tolist()
        return result

    def rows(self) -> list[tuple[str, str]]:
        """The short table: every branch with its ends, and the transitions between lowest branches."""
        result = [("along", f"{self.key} from {self.diagram.family.low:g} to {self.diagram.family.high:g}")]
        for named in self.branches:
            low, high = named.branch.ends
            span = f"from {low.x:.7g} ({low.kind}) to {high.x:.7g} ({high.kind})"
            result.append((f"branch {named.number}", f"{named.phase}, {span}"))
        lowest = [transition for transition in self.diagram.transitions if transition.lowest]
        for one in lowest:
            who = " and ".join(str(i + 1) for i in one.branches)
            result.append(("transition", f"{one.kind} at {one.x:.7g}, branch {who}"))
        if higher := len(self.diagram.transitions) - len(lowest):
            result.append(("", f"{higher} more between states that are not the lowest: see the JSON"))
        if not self.diagram.complete:
            result.append(("incomplete", "there are more branches than were followed: narrow the range"))
        result.append(("precision", f"{self.diagram.precision:.2g}"))
        return result

    def to_dict(self) -> dict[str, Any]:
        """Everything, ready for JSON."""
        family = self.diagram.family
        return {
            "key": self.key,
            "from": family.low,
            "to": family.high,
            "precision": self.diagram.precision,
            "complete": self.diagram.complete,
            "branches": [
                {
                    "branch": one.number,
                    "phase": one.phase,
                    "ends": [{"at": end.x, "kind": end.kind} for end in one.branch.ends],
                    "states": {name: values.tolist() for name, values in one.table.items()},
                }
                for one in self.branches
            ],
            "transitions": [
                {"at": t.x, "kind": t.kind, "branches": [i + 1 for i in t.branches], "lowest": t.lowest}
                for t in self.diagram.transitions
            ],
            "inputs": family.material.to_dict(),
        }


def describe(diagram: Diagram) -> Along:
    """Names and order parameters of all branches, numbered from 1 in the order of their lower ends."""
    return Along(diagram, tuple(_named(diagram, i, branch) for i, branch in enumerate(diagram.branches, 1)))


def _named(diagram: Diagram, number: int, branch: Branch) -> NamedBranch:
    middle = branch.points[len(branch.points) // 2]
    solution = solve(diagram.family.material_at(middle.x), only_starts=[Start("branch", middle.point.p)])
    name = label(solution, Order(solution), gap(solution)).name
    table = np.array([_quantities(point) for point in branch.curve]).T
    return NamedBranch(number, name, branch, dict(zip(("x", *QUANTITIES), table, strict=True)))


def _quantities(state: BranchPoint) -> tuple[float, ...]:
    order = Order(state)
    return (
        state.x,
        state.free_energy,
        float(order.hybridization.max()),
        float(np.linalg.norm(order.spin_moment, axis=1).max()),
        float(np.linalg.norm(order.electron_moment, axis=1).max()),
        state.soft,
    )
