"""Steps that lower F: accelerated mixing while far away, trust-region Newton near and away from saddles.

A step is a frozen settings record with `init` and `propose`; what it remembers between iterations is a separate
record that the driver hands back. The driver alone accepts or rejects.
"""

from dataclasses import dataclass, field, replace
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from kondomf.meanfield.curvature import Curvature, curvature_at, supported
from kondomf.meanfield.problem import ROUNDING, Point, Problem

Array = NDArray[np.float64]


class Step(Protocol):
    """What the driver needs of a step; `memory` is the step's own record."""

    @property
    def name(self) -> str: ...
    @property
    def leaves_saddles(self) -> bool: ...
    def init(self) -> Any: ...
    def propose(self, problem: Problem, point: Point, memory: Any) -> tuple[Array, Any]: ...
    def correct(self, problem: Problem, point: Point, trial: Point, memory: Any) -> Array | None: ...
    def improves(self, before: Point, after: Point, rounding: float) -> bool: ...
    def judge(self, memory: Any, accepted: bool, change: float) -> Any: ...


@dataclass(frozen=True)
class MixingMemory:
    """Damping in use, and the last fields and residuals over the active channels."""

    damping: float
    history: tuple[tuple[Array, Array], ...] = ()


@dataclass(frozen=True)
class Mixing:
    """Damped fixed-point iteration with Anderson acceleration; for small damping it descends in F.

    Source: J. ACM 12, 547 (1965), "Iterative procedures for nonlinear integral equations".
    """

    damping: float = 0.7
    depth: int = 4
    name: str = "mixing"
    leaves_saddles: bool = False

    def init(self) -> MixingMemory:
        return MixingMemory(self.damping)

    def propose(self, problem: Problem, point: Point, memory: MixingMemory) -> tuple[Array, MixingMemory]:
        """Change of the active fields (Na,) and the memory to go with it."""
        active = problem.model.active
        x, r = point.phi[active], point.residual[active]
        history = (*memory.history[-self.depth :], (x, r))
        step = memory.damping * r
        if len(history) > 1:
            dx = np.array([x - old for old, _ in history[:-1]]).T
            dr = np.array([r - old for _, old in history[:-1]]).T
            gamma = np.linalg.lstsq(dr, r, rcond=1e-8)[0]
            step = step - (dx + memory.damping * dr) @ gamma
        return step, replace(memory, history=history)

    def correct(self, problem: Problem, point: Point, trial: Point, memory: MixingMemory) -> Array | None:
        """Mixing tries one change a step."""
        return None

    def improves(self, before: Point, after: Point, rounding: float) -> bool:
        """F must not rise."""
        return after.free_energy <= before.free_energy + rounding

    def judge(self, memory: MixingMemory, accepted: bool, change: float) -> MixingMemory:
        """After a rejection: forget the history and halve the damping."""
        if accepted:
            return replace(memory, damping=min(self.damping, 1.2 * memory.damping))
        return MixingMemory(memory.damping / 2)


@dataclass(frozen=True)
class TrustMemory:
    """What a trust region remembers.

    radius : trust radius in the metric of the response, sqrt(meV).
    origin, curvature : the present point, its free multipliers chosen (see `supported`), and the curvature there.
    predicted : change of F that the step should bring, meV; 0 where rounding hides it.
    """

    radius: float | None = None
    origin: Point | None = field(default=None, repr=False)
    curvature: Curvature | None = field(default=None, repr=False)
    predicted: float = 0.0


@dataclass(frozen=True)
class TrustRegion:
    """Trust-region Newton step (H + nu) y = -R^T r, dphi = (r + V R y)/(1 + nu), exact in the eigenbasis of H.

    Turns into plain mixing where the response vanishes. In the hard case (gradient orthogonal to a direction of
    negative curvature, as at a symmetric saddle) it follows that direction to the radius.
    Source: SIAM J. Sci. Stat. Comput. 4, 553 (1983), "Computing a trust region step".
    """

    floor: float = 1e-8
    stiff: float = 0.03
    name: str = "newton"
    leaves_saddles: bool = True

    def init(self) -> TrustMemory:
        return TrustMemory()

    def propose(self, problem: Problem, point: Point, memory: TrustMemory) -> tuple[Array, TrustMemory]:
        """Change of the active fields (Na,) and the memory to go with it."""
        origin, here = memory.origin, memory.curvature
        if origin is None or here is None:
            origin, here = supported(problem, point, curvature_at(problem, point))
        radius = memory.radius or float(np.sqrt(0.1 * problem.model.scale))
        active = problem.model.active
        r = origin.residual[active]
        gradient = here.coordinates(r)
        y, nu = trust_region_minimum(here.eigenvalues, gradient, radius, self.floor)
        predicted = float(gradient @ y + here.eigenvalues @ y**2 / 2)
        visible = predicted < -ROUNDING * problem.model.scale
        change = here.fields(y, r, nu) + (origin.phi - point.phi)[active]
        return change, TrustMemory(radius, origin, here, predicted if visible else 0.0)

    def correct(self, problem: Problem, point: Point, trial: Point, memory: TrustMemory) -> Array | None:
        """Change that takes `trial` back to the floor of a curved valley: a Newton step in the stiff modes alone.

        None where F fell as predicted.
        Soft modes (|K| << t: rotations of the hybridization) run along curved valleys. Without this the
        stiff modes, excited in second order, would hold the radius down.
        """
        assert memory.curvature is not None
        if not memory.predicted or trial.free_energy - point.free_energy < 0.9 * memory.predicted:
            return None
        eigenvalues = memory.curvature.eigenvalues
        r = trial.residual[problem.model.active]
        gradient = memory.curvature.coordinates(r)
        stiff = eigenvalues > self.stiff
        # y = g/(1 - e) makes Curvature.fields leave a soft mode where it is.
        y = gradient / np.where(stiff, -eigenvalues, 1 - eigenvalues)
        return memory.curvature.fields(y, r, 0.0)

    def improves(self, before: Point, after: Point, rounding: float) -> bool:
        """F must not rise."""
        return after.free_energy <= before.free_energy + rounding

    def judge(self, memory: TrustMemory, accepted: bool, change: float) -> TrustMemory:
        """Shrink the radius after a poor prediction, widen it after a good one; a new point needs a new curvature."""
        assert memory.radius is not None
        quality = change / memory.predicted if memory.predicted else 1.0
        factor = 0.4 if not accepted or quality < 0.25 else (1.6 if quality > 0.8 else 1.0)
        radius = memory.radius * factor
        return TrustMemory(radius) if accepted else replace(memory, radius=radius)


@dataclass(frozen=True)
class StationaryNewton:
    """Newton step H y = -R^T r to the nearest stationary point, minimum or saddle; the residual must fall.

    For the study of a given start only: this is how a symmetric saddle is kept for inspection.
    """

    floor: float = 1e-10
    name: str = "stationary newton"
    leaves_saddles: bool = False

    def init(self) -> TrustMemory:
        return TrustMemory()

    def propose(self, problem: Problem, point: Point, memory: TrustMemory) -> tuple[Array, TrustMemory]:
        """Change of the active fields (Na,) and the memory to go with it."""
        here = memory.curvature or curvature_at(problem, point)
        damping = memory.radius or 1.0
        r = point.residual[problem.model.active]
        slope = np.where(np.abs(here.eigenvalues) < self.floor, np.inf, here.eigenvalues)
        y = -here.coordinates(r) / slope
        return damping * here.fields(y, r, 0.0), TrustMemory(damping, point, here)

    def correct(self, problem: Problem, point: Point, trial: Point, memory: TrustMemory) -> Array | None:
        """A stationary point is sought by plain Newton steps."""
        return None

    def improves(self, before: Point, after: Point, rounding: float) -> bool:
        """The norm of the residual must fall."""
        return bool(np.linalg.norm(after.residual) < np.linalg.norm(before.residual))

    def judge(self, memory: TrustMemory, accepted: bool, change: float) -> TrustMemory:
        """Halve the step after a rejection, else return towards the full step."""
        assert memory.radius is not None
        return TrustMemory(min(1.0, 2 * memory.radius)) if accepted else replace(memory, radius=memory.radius / 2)


def trust_region_minimum(eigenvalues: Array, gradient: Array, radius: float, floor: float) -> tuple[Array, float]:
    """Minimise gradient.y + y.diag(eigenvalues).y/2 over |y| <= radius; returns y (d,) and the shift nu >= floor."""
    if not len(eigenvalues):
        return gradient, floor
    lowest = float(eigenvalues.min())
    above = eigenvalues - lowest  # the shift is sought as the distance d > 0 from -lowest, which keeps its digits
    least = floor + max(lowest, 0.0)

    def length(d: float) -> float:
        return float(np.linalg.norm(gradient / (above + d)))

    if length(least) > radius:
        low, high = least, least + float(np.linalg.norm(gradient)) / radius
        while high - low > 1e-6 * high:
            middle = float(np.sqrt(low * high))
            low, high = (middle, high) if length(middle) > radius else (low, middle)
        return -gradient / (above + high), high - lowest
    y = -gradient / (above + least)
    if lowest < -floor:
        i = int(eigenvalues.argmin())
        rest = float(np.linalg.norm(np.delete(y, i)))
        y[i] = np.copysign(np.sqrt(max(radius**2 - rest**2, 0.0)), y[i])
    return y, least - lowest
